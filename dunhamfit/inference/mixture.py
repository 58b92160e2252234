r"""Posterior under errors that are scale mixtures of Gaussians: Student's law, or good and bad lines.

Coordinates u, ln f, theta (own parameters of the error model). One step of the chain, all
walkers together:

1. theta given u and f, with the weights of the lines integrated out (Metropolis, a few tries);
2. the weight of every line given u, f and theta, exactly;
3. the noise factors given u and the weights, exactly: sum_i w_i r_i^2 / f^2 ~ chi-square(n);
4. u given the weights and the noise factors, exactly: a Gaussian.

The weights live for one step only. Steps 1 and 2 together draw theta and the weights
jointly, so that the whole leaves the posterior unchanged (C. Liu and D. B. Rubin, Stat.
Sinica 5, 19 (1995) for weights as missing data; D. A. van Dyk and T. Park, J. Am. Stat.
Assoc. 103, 790 (2008) for the order of partly collapsed steps; both from memory).
"""

from __future__ import annotations

import emcee
import numpy as np

from dunhamfit.fit.design import Design
from dunhamfit.fit.record import Fit
from dunhamfit.inference import quadratic
from dunhamfit.inference.error_models import LineErrors
from dunhamfit.inference.frame import Frame
from dunhamfit.inference.marginal import prior_gram
from dunhamfit.inference.proposal import draw_log_factors

# Tries of step 1. Their length is drawn anew each time, between these two in ln: the width of the
# posterior of theta goes from far below 0.1 (thousands of lines) to above 1 (few).
_TRIES = 4
_LENGTHS = np.log([0.02, 2.0])
# Median of |t| for a unit Gaussian.
_MEDIAN_OF_NORMAL = 0.6745


class MixtureTarget:
    """All parameters, noise factors and the own parameters of the error model.

    Parameters
    ----------
    fit : Fit
    design : Design
        Rows with the stated uncertainties, without weights of any robust fit.
    frame : Frame
    errors : LineErrors
    factor_range : tuple of float
        Lowest and highest noise factor that the prior allows.
    """

    walkers = 8
    warm_up = 100

    def __init__(
        self, fit: Fit, design: Design, frame: Frame, errors: LineErrors, factor_range: tuple[float, float]
    ):
        self.frame = frame
        self.errors = errors
        self.size = frame.size + frame.factors + len(errors.names)
        self.bounds = np.log(factor_range)
        self.used = design.used
        self._count = len(fit.lines)
        sigma = fit.lines.sigma[design.used]
        rows = design.rows.whitened[:, frame.free] / design.rows.scale[:, None]
        self._rows = (rows @ frame.factor)[design.row_of] / sigma[:, None]
        self._right = fit.residuals[design.used] / sigma
        self._augmented = np.column_stack([self._rows, self._right])
        self._priors = prior_gram(design.rows.triangles(fit.values), frame)
        label = frame.label[design.group_of]
        self._member = (label[:, None] == np.arange(frame.factors)).astype(float)
        self._lines = self._member.sum(axis=0)
        self._held = np.where(label < 0, frame.held[design.group_of], 1.0)

    def split(self, coords: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """u, ln f and theta of coordinates of shape (..., size)."""
        ends = self.frame.size, self.frame.size + self.frame.factors
        return coords[..., : ends[0]], coords[..., ends[0] : ends[1]], coords[..., ends[1] :]

    def natural(self, coords: np.ndarray) -> np.ndarray:
        u, log_factors, theta = self.split(coords)
        return np.concatenate(
            [self.frame.constants(u), np.exp(log_factors), self.errors.natural(theta)], axis=-1
        )

    def coords(self, natural: np.ndarray) -> np.ndarray:
        """The inverse of `natural`, shape (w, size)."""
        constants, factors, own = self.split(natural)
        u = np.linalg.solve(self.frame.factor, (constants - self.frame.values).T).T
        return np.concatenate([u, np.log(factors), self.errors.theta(own)], axis=-1)

    def reduced(self, coords: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Reduced residuals t, shape (w, n), and theta."""
        u, log_factors, theta = self.split(coords)
        return self.residuals(u) / self.line_factors(log_factors), theta

    def by_line(self, values: np.ndarray) -> np.ndarray:
        """A number of each used line as one of every line, NaN for excluded ones, shape (n_lines,)."""
        whole = np.full(self._count, np.nan)
        whole[self.used] = values
        return whole

    def line_factors(self, log_factors: np.ndarray) -> np.ndarray:
        """Noise factor of each line, shape (w, n)."""
        return np.exp(log_factors @ self._member.T) * self._held

    def residuals(self, u: np.ndarray) -> np.ndarray:
        """Residuals over stated uncertainties, shape (w, n)."""
        return self._right - u @ self._rows.T

    def log_prob(self, coords: np.ndarray) -> np.ndarray:
        """Log posterior, shape (w,)."""
        u, log_factors, _ = self.split(coords)
        t, theta = self.reduced(coords)
        return (
            self.errors.log_likelihood(t, theta)
            + self.errors.log_prior(theta)
            - log_factors @ self._lines
            - 0.5 * quadratic.sum_of_squares(self._priors[None], u)[:, 0]
        )

    def moves(self) -> list[emcee.moves.Move]:
        return [_Sweep(self)]

    def start(self, random: np.random.RandomState) -> np.ndarray:
        u = random.standard_normal((self.walkers, self.frame.size))
        scale = [self._scale(member) for member in self._member.T.astype(bool)]
        log_factors = np.clip(np.log(scale), *self.bounds) + np.zeros((self.walkers, self.frame.factors))
        theta = self.errors.start + 0.1 * random.standard_normal((self.walkers, len(self.errors.start)))
        return np.concatenate([u, log_factors, theta], axis=1)

    def _scale(self, member: np.ndarray) -> float:
        """Width of the residuals of some lines that a minority of bad ones does not move."""
        return max(float(np.median(np.abs(self._right[member]))) / _MEDIAN_OF_NORMAL, float(np.exp(self.bounds[0])))

    def weighted_gram(self, weights: np.ndarray) -> np.ndarray:
        """Gram matrix under each set of line weights, shape (w, p + 1, p + 1)."""
        return np.stack([(self._augmented.T * weight) @ self._augmented for weight in weights]) + self._priors

    def sweep(self, coords: np.ndarray, random: np.random.RandomState) -> np.ndarray:
        """One step of the chain, see the module docstring; new coordinates, shape (w, size)."""
        u, log_factors, theta = self.split(coords)
        residuals = self.residuals(u)
        t = residuals / self.line_factors(log_factors)
        theta = self._new_theta(t, theta, random)
        weights = self.errors.draw_weights(t, theta, random)
        squares = (weights * residuals**2) @ self._member
        log_factors = draw_log_factors(squares, self._lines, log_factors, self.bounds, random)
        weights /= self.line_factors(log_factors) ** 2
        u = quadratic.draw(quadratic.factorise(self.weighted_gram(weights)), random)
        return np.concatenate([u, log_factors, theta], axis=1)

    def _new_theta(self, t: np.ndarray, theta: np.ndarray, random: np.random.RandomState) -> np.ndarray:
        value = self.errors.log_likelihood(t, theta) + self.errors.log_prior(theta)
        for _ in range(_TRIES):
            lengths = np.exp(random.uniform(*_LENGTHS, size=(len(theta), 1)))
            proposed = theta + lengths * random.standard_normal(theta.shape)
            prior = self.errors.log_prior(proposed)
            possible = np.isfinite(prior)
            trial = np.where(possible[:, None], proposed, theta)
            trial_value = np.where(possible, self.errors.log_likelihood(t, trial) + prior, -np.inf)
            accepted = np.log(random.random_sample(len(theta))) < trial_value - value
            theta = np.where(accepted[:, None], proposed, theta)
            value = np.where(accepted, trial_value, value)
        return theta


class _Sweep(emcee.moves.Move):
    """The step of the chain as emcee calls it; every part is exact or accepts for itself."""

    def __init__(self, target: MixtureTarget):
        self._target = target

    def propose(self, model, state):
        coords = self._target.sweep(state.coords, model.random)
        log_prob, _ = model.compute_log_prob_fn(coords)
        moved = emcee.State(coords, log_prob=log_prob, random_state=state.random_state)
        return moved, np.ones(len(coords), dtype=bool)
