r"""Rounds of a robust fit on rows: scales of groups, weights of lines, parameters.

The sum over lines of rho(u), u = r/(f sigma), and half the squares of the priors is made least.
Everything is done in coordinates in which the plain fit has the unit matrix as covariance.

The scale f of a group must not be pulled up by wrong lines, nor down by the weights. The restricted
likelihood of the plain fit, applied to weighted rows, would do both: down-weighted lines still add
up to a few units each, and good lines lose weight too, so that the scale shrinks from round to
round. A scale is instead that of the middle of its residuals,

    f^2 = sum_i b(u_i) r_i^2/sigma_i^2 / [ beta sum_i b(u_i) (1 - h) ],

with the bisquare b(u) = (1 - u^2/36)^2 for |u| < 6 and 0 beyond: a line beyond 6 f sigma does not
count at all. beta = E[b u^2]/E[b] makes it unbiased for normal noise, of which it uses 96 % of the
information; 1 - h is what the fit leaves of the variance of the group. It starts from the median
residual, first of all lines together, or a few lines without a scale of their own would rule while those
of the others are large. Weights and parameters meanwhile are those of Huber's loss, whose sum has one minimum
only and which a line 1e6 sigma off pulls no more than one a few sigma off. (Scales by weighted
squares: F. Mosteller and J. W. Tukey, Data Analysis and Regression, 1977, from memory; the form
for fits is derived here.)

Then the scales are held and the sum of the loss that was asked for is taken down from there. Losses
whose weight falls to zero have several minima, of which this finds the one beside Huber's. (Scale
first, then a loss that falls off: V. J. Yohai, Ann. Stat. 15, 642 (1987), from memory.)
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from dunhamfit.algebra.robust import Huber, Loss
from dunhamfit.errors import NotConverged

# The promise is 1e-6 sigma; what is left is less than the last step of Newton.
_SETTLED_STEP = 1e-7
# Of the sum of losses, relative.
_ROUNDING = 1e-12
# Relative change of a scale in a round that is left alone where the rounds run out.
_CREEP = 1e-4
_ROUNDS = 300
# The first stage only has to come near.
_NEAR_STEP, _NEAR_ROUNDS = 1e-2, 100

# The median of |u| for normal u.
_NORMAL_MEDIAN = 0.6744897501960817
# Of the bisquare with this cut: beta, and the share of the information on f that it uses (by quadrature).
_CUT, _BETA = 6.0, 0.8924205372
SCALE_EFFICIENCY = 0.95848
# As in `dunhamfit.algebra.variance`: a smaller factor means residuals at the rounding of the positions.
_SMALLEST_SCALE = 1e-6


@dataclass(frozen=True, eq=False)
class State:
    """Parameters in units of the plain fit's sigma, noise factors, and which of those are estimated."""

    at: np.ndarray
    factors: np.ndarray
    active: np.ndarray


@dataclass(frozen=True, eq=False)
class Problem:
    """The lines in the coordinates in which the plain fit has the unit matrix as covariance.

    There the Gram matrices are well conditioned: `basis` has orthonormal columns.

    Attributes
    ----------
    basis : ndarray of float, shape (rows, p)
        Whitened rows times R^-1; the priors' rows come last.
    start : ndarray of float, shape (n_used,)
        Residuals of the lines where `at` is zero, over their stated uncertainties.
    prior_start : ndarray of float, shape (priors,)
    row_of : ndarray of int, shape (n_used,)
    share : ndarray of float, shape (n_used,)
        1 / sigma of the line over that of its row: below 1 where repeats are pooled.
    label : ndarray of int, shape (n_used,)
        Noise factor of each line.
    sizes : ndarray of int, shape (factors,)
        Lines of each.
    grams : ndarray of float, shape (factors + 1, p, p)
        Of the rows of each factor, then of the priors.
    """

    basis: np.ndarray
    start: np.ndarray
    prior_start: np.ndarray
    row_of: np.ndarray
    share: np.ndarray
    label: np.ndarray
    sizes: np.ndarray
    grams: np.ndarray

    @property
    def count(self) -> int:
        return len(self.sizes)

    def pooled(self) -> Problem:
        """The same lines with one noise factor."""
        return replace(
            self,
            label=np.zeros_like(self.label),
            sizes=np.array([len(self.label)]),
            grams=np.stack([self.grams[:-1].sum(axis=0), self.grams[-1]]),
        )

    def residuals(self, at: np.ndarray) -> np.ndarray:
        """Residuals of the lines over their stated uncertainties, shape (n_used,)."""
        return self.start - self.share * (self.basis @ at)[self.row_of]

    def prior_residuals(self, at: np.ndarray) -> np.ndarray:
        return self.prior_start - self.basis[len(self.basis) - len(self.prior_start) :] @ at

    def total(self, at: np.ndarray, u: np.ndarray, loss: Loss) -> float:
        """Sum of the losses of the lines and of half the squares of the priors."""
        prior = self.prior_residuals(at)
        return float(loss.rho(u).sum() + prior @ prior / 2)

    def step(
        self, at: np.ndarray, residual: np.ndarray, weights: np.ndarray, curvature: np.ndarray
    ) -> tuple[np.ndarray, float]:
        """Step against the gradient for weights of the lines and the curvature of their losses, and its length.

        Raises
        ------
        LinAlgError
            If the curvatures do not make a minimum.
        """
        data = len(self.basis) - len(self.prior_start)
        size, pull = np.ones(len(self.basis)), np.empty(len(self.basis))
        size[:data] = np.bincount(self.row_of, curvature * self.share**2, data)
        pull[:data] = np.bincount(self.row_of, weights * self.share * residual, data)
        pull[data:] = self.prior_residuals(at)
        gradient = self.basis.T @ pull
        step = cho_solve(cho_factor((self.basis * size[:, None]).T @ self.basis), gradient)
        return step, float(np.sqrt(max(gradient @ step, 0.0)))

    def leverages(self, factors: np.ndarray) -> np.ndarray:
        """Mean leverage of the lines of each factor in a plain fit with these factors, shape (factors,)."""
        scaled = self.grams[:-1] / factors[:, None, None] ** 2
        inner = cho_factor(scaled.sum(axis=0) + self.grams[-1])
        spent = np.array([np.trace(cho_solve(inner, gram)) for gram in scaled])
        return np.clip(spent / self.sizes, 0.0, 1.0)


def find_scales(problem: Problem, state: State, least_degrees: float, *, by_median: bool) -> tuple[State, int]:
    """Rounds of factors, weights and parameters with Huber's loss, and how many there were.

    Factors from medians only have to come near. Those from the middle of the residuals may be left where they
    creep: their own uncertainty is a hundred times larger.
    """
    huber = Huber()
    step = change = np.inf
    for count in range(1, (_NEAR_ROUNDS if by_median else _ROUNDS) + 1):
        previous, residual = state, problem.residuals(state.at)
        state = _with_scales(problem, state, residual, huber, least_degrees, by_median=by_median)
        change = float(np.max(np.abs(np.log(state.factors / previous.factors))))
        scale = state.factors[problem.label]
        weights = huber.weight(residual / scale) / scale**2
        try:
            move, step = problem.step(state.at, residual, weights, weights)
        except LinAlgError:
            raise _not_settled(count, step, state) from None
        state = replace(state, at=state.at + move)
        if max(step, change) < (_NEAR_STEP if by_median else _SETTLED_STEP):
            return state, count
    if by_median or change < _CREEP:
        return state, count
    raise _not_settled(count, step, state)


def descend(problem: Problem, state: State, loss: Loss) -> tuple[State, int]:
    """Rounds of weights and parameters with the factors held, and how many there were.

    A step of Newton is taken where it leads down; the step for the weights always does.
    """
    scale = state.factors[problem.label]
    residual = problem.residuals(state.at)
    total = problem.total(state.at, residual / scale, loss)
    step = np.inf
    for count in range(1, _ROUNDS + 1):
        u = residual / scale
        weights = loss.weight(u) / scale**2
        for curvature in (loss.slope(u) / scale**2, weights):
            try:
                move, step = problem.step(state.at, residual, weights, curvature)
            except LinAlgError:
                continue
            at = state.at + move
            residual_there = problem.residuals(at)
            total_there = problem.total(at, residual_there / scale, loss)
            if total_there <= total * (1 + _ROUNDING) or step < _SETTLED_STEP:
                break
        else:
            raise _not_settled(count, step, state)
        state, residual, total = replace(state, at=at), residual_there, total_there
        if step < _SETTLED_STEP:
            return state, count
    raise _not_settled(count, step, state)


def _not_settled(count: int, step: float, state: State) -> NotConverged:
    return NotConverged(
        f"the robust fit has not settled after {count} rounds (last step {step:.1e} sigma): too many lines disagree "
        "with the model for the rest to decide; look for a wrong source, unit or term, or use another robust loss",
        state={"step_in_sigma": step, "factors": state.factors, "values_in_sigma": state.at},
    )


def _with_scales(
    problem: Problem, state: State, residual: np.ndarray, loss: Loss, least_degrees: float, *, by_median: bool
) -> State:
    """The state with its estimated factors renewed; those that the lines cannot tell go back to 1."""
    if not state.active.any():
        return state
    leverage = problem.leverages(state.factors)
    active = state.active & (problem.sizes * (1 - leverage) >= least_degrees)
    free = _left_free(leverage, loss)
    if by_median:
        factors = _medians(problem, residual) / (_NORMAL_MEDIAN * np.sqrt(free))
    else:
        u = residual / (state.factors * np.sqrt(free))[problem.label]
        inner = np.maximum(1 - (u / _CUT) ** 2, 0.0) ** 2
        above = np.bincount(problem.label, inner * residual**2, problem.count)
        below = _BETA * free * np.bincount(problem.label, inner, problem.count)
        factors = np.sqrt(above / np.maximum(below, np.finfo(float).tiny))
    active &= factors > _SMALLEST_SCALE
    return replace(state, factors=np.where(active, factors, 1.0), active=active)


def _left_free(leverage: np.ndarray, loss: Loss) -> np.ndarray:
    """Variance of a residual over that of its error: 1 - h (2 - 1/efficiency), to first order in h.

    From r = e - a^T (A^T A)^-1 A^T psi(e)/E[psi'] for normal e; 1 - h for least squares.
    """
    return 1 - leverage * (2 - 1 / loss.efficiency)


def _medians(problem: Problem, residual: np.ndarray) -> np.ndarray:
    order = np.argsort(problem.label, kind="stable")
    parts = np.split(np.abs(residual)[order], np.cumsum(problem.sizes)[:-1])
    return np.array([np.median(part) for part in parts])
