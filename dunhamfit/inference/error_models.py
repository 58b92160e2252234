r"""What errors of single lines look like beyond the Gaussian, as scale mixtures of Gaussians.

Each model is a law of the reduced residual t = (observed - calculated) / (f sigma), with
the noise factor f and the stated sigma, that can be had by giving every line a weight of
its own: t given the weight w is Gaussian with variance 1/w. Given all weights everything is
Gaussian, which is what the sampler needs. The own parameters of a model are sampled as
`theta`, on scales without bounds:

student     t ~ Student's law with nu degrees of freedom (the wing parameter);
            w ~ Gamma((nu + 1)/2, rate (nu + t^2)/2) given t; theta = (ln nu)
outliers    t ~ (1 - e) N(0, 1) + e N(0, k^2): a line is good, or bad with probability e;
            w = 1 or 1/k^2; theta = (logit e, ln k)

(D. F. Andrews and C. L. Mallows, J. R. Stat. Soc. B 36, 99 (1974); K. L. Lange, R. J. A.
Little and J. M. G. Taylor, J. Am. Stat. Assoc. 84, 881 (1989), from memory.)
"""

from __future__ import annotations

from typing import Protocol

import numpy as np
from scipy.special import expit, gammaln, log_expit, logit

_LN_2_PI = float(np.log(2 * np.pi))


class LineErrors(Protocol):
    """The law of the reduced residuals of lines.

    Attributes
    ----------
    names : tuple of str
        Of the model's own parameters.
    prior : str
        Their prior, in words.
    start : ndarray of float, shape (own parameters,)
        theta to start from.
    """

    names: tuple[str, ...]
    prior: str
    start: np.ndarray

    def log_likelihood(self, t: np.ndarray, theta: np.ndarray) -> np.ndarray:
        """Sum over lines of ln p(t); t of shape (w, n), theta (w, own parameters), result (w,)."""

    def log_prior(self, theta: np.ndarray) -> np.ndarray:
        """ln p(theta) on the scale of theta, shape (w,)."""

    def draw_weights(self, t: np.ndarray, theta: np.ndarray, random: np.random.RandomState) -> np.ndarray:
        """Weight of each line given its reduced residual, shape (w, n)."""

    def natural(self, theta: np.ndarray) -> np.ndarray:
        """The own parameters as they are reported, same shape as theta."""

    def theta(self, natural: np.ndarray) -> np.ndarray:
        """The inverse of `natural`."""


class StudentErrors:
    """Wings heavier than the Gaussian's, by as much as the lines say."""

    names = ("wing",)
    prior = (
        "wing: degrees of freedom nu of Student's law, Gamma(shape 2, rate 0.1) for nu >= 1 (mean 20; M. A. Juarez "
        "and M. F. J. Steel, J. Bus. Econ. Stat. 28, 52 (2010)); noise factors multiply the width of that law"
    )
    start = np.array([np.log(5.0)])

    def log_likelihood(self, t, theta):
        nu = np.exp(theta)
        constant = gammaln((nu + 1) / 2) - gammaln(nu / 2) - 0.5 * np.log(np.pi * nu)
        return t.shape[1] * constant[:, 0] - (nu[:, 0] + 1) / 2 * np.log1p(t**2 / nu).sum(axis=1)

    def log_prior(self, theta):
        log_nu = theta[:, 0]
        return np.where(log_nu >= 0, 2 * log_nu - 0.1 * np.exp(log_nu), -np.inf)

    def draw_weights(self, t, theta, random):
        nu = np.exp(theta)
        return random.standard_gamma((nu + 1) / 2, t.shape) * 2 / (nu + t**2)

    def natural(self, theta):
        return np.exp(theta)

    def theta(self, natural):
        return np.log(natural)


class OutlierErrors:
    """Every line good or bad; bad ones are wider by a factor that all bad lines share."""

    names = ("bad_fraction", "bad_width")
    prior = (
        "bad_fraction: Beta(1, 19), mean 5 %, 95 % below 15 %; bad_width: factor by which the uncertainty of a bad "
        "line is wider, ln uniform between 3 and 1000"
    )
    start = np.array([logit(0.02), np.log(10.0)])
    _widths = np.log([3.0, 1000.0])

    def _log_good_bad(self, t, theta):
        """ln of the two parts of the density, each of shape (w, n)."""
        fraction, log_width = theta[:, :1], theta[:, 1:]
        good = log_expit(-fraction) - 0.5 * (t**2 + _LN_2_PI)
        bad = log_expit(fraction) - log_width - 0.5 * (t**2 * np.exp(-2 * log_width) + _LN_2_PI)
        return good, bad

    def log_likelihood(self, t, theta):
        return np.logaddexp(*self._log_good_bad(t, theta)).sum(axis=1)

    def log_prior(self, theta):
        fraction, log_width = theta[:, 0], theta[:, 1]
        inside = (log_width >= self._widths[0]) & (log_width <= self._widths[1])
        # Beta(1, 19) in e becomes e (1 - e)^19 on the scale of logit e.
        return np.where(inside, log_expit(fraction) + 19 * log_expit(-fraction), -np.inf)

    def probability_bad(self, t: np.ndarray, theta: np.ndarray) -> np.ndarray:
        """Probability that each line is bad given its reduced residual, shape (w, n)."""
        good, bad = self._log_good_bad(t, theta)
        return expit(bad - good)

    def draw_weights(self, t, theta, random):
        bad = random.random_sample(t.shape) < self.probability_bad(t, theta)
        return np.where(bad, np.exp(-2 * theta[:, 1:]), 1.0)

    def natural(self, theta):
        return np.stack([expit(theta[..., 0]), np.exp(theta[..., 1])], axis=-1)

    def theta(self, natural):
        return np.stack([logit(natural[..., 0]), np.log(natural[..., 1])], axis=-1)
