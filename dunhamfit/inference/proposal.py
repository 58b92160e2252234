r"""Draws of noise factors, each from its own scaled inverse chi-square.

If a group of lines had its noise factor to itself, with a prior uniform in ln f, then
S / f^2 would follow a chi-square law with n degrees of freedom, where S is the weighted sum
of squares of the group's residuals and n what the group has left after its share of the
parameters (any text on Bayesian regression, for instance A. Gelman et al., Bayesian Data
Analysis, 3rd ed., section 14.2). The proposal is independent of where the chain stands.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class InverseChiSquare:
    """Independent laws S_l / f_l^2 ~ chi-square(n_l), in terms of ln f_l.

    Attributes
    ----------
    squares : ndarray of float, shape (factors,)
        S, for uncertainties as stated.
    degrees : ndarray of float, shape (factors,)
        n, above 0.
    """

    squares: np.ndarray
    degrees: np.ndarray

    def draw(self, count: int, random: np.random.RandomState) -> np.ndarray:
        """ln f of `count` independent draws, shape (count, factors)."""
        return 0.5 * np.log(self.squares / random.chisquare(self.degrees, (count, len(self.squares))))

    def log_density(self, log_factors: np.ndarray) -> np.ndarray:
        """ln of the joint density of ln f, shape (count,), without its constant."""
        scaled = self.squares * np.exp(-2.0 * log_factors)
        return 0.5 * (self.degrees * np.log(scaled) - scaled).sum(axis=1)

    def propose(self, log_factors: np.ndarray, random: np.random.RandomState) -> tuple[np.ndarray, np.ndarray]:
        """New ln f for every row of `log_factors`, and the log of the Hastings ratio of each."""
        proposed = self.draw(len(log_factors), random)
        return proposed, self.log_density(log_factors) - self.log_density(proposed)


def draw_log_factors(
    squares: np.ndarray,
    lines: np.ndarray,
    before: np.ndarray,
    bounds: np.ndarray,
    random: np.random.RandomState,
) -> np.ndarray:
    """ln f drawn from its law given the parameters, S / f^2 ~ chi-square(n); shape (w, factors).

    Parameters
    ----------
    squares : ndarray of float, shape (w, factors)
        Sum of squares of the lines of each factor, uncertainties as stated.
    lines : ndarray of int, shape (factors,)
    before : ndarray of float, shape (w, factors)
        Where ln f stands; it stays there if the draw falls outside the bounds of the prior.
    bounds : ndarray of float, shape (2,)
    """
    drawn = 0.5 * np.log(squares / random.chisquare(lines, squares.shape))
    return np.where((drawn < bounds[0]) | (drawn > bounds[1]), before, drawn)
