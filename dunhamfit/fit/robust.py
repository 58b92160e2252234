r"""Robust fits: lines weighted by their residuals, round after round, until the constants settle.

The fit minimises, over the parameters c and with u_i = r_i/(f sigma_i),

    sum_i rho(u_i) + 1/2 sum of squares of the priors,

where rho is a loss of `dunhamfit.algebra.robust`. The scale f sigma_i is the STATED uncertainty
of the line times the noise factor f of its group under the error policy. With the policy "stated"
f = 1 and nothing is estimated from residuals; otherwise the factors are those that
`dunhamfit.algebra.reweighting` finds, the same for every loss.

The covariance is that of estimating equations (P. J. Huber, Robust Statistics, 1981, sections
6.3 and 7.6, from memory), B^-1 M B^-1 with A_g the rows of group g over f sigma:

    B = sum_g b_g A_g^T A_g + priors,    b_g = mean psi'(u)
    M = sum_g m_g A_g^T A_g + priors,    m_g = K^2 sum psi(u)^2/(n - p_g),
    K = 1 + (p_g/n) var psi'/(mean psi')^2, n lines and p_g = sum of their leverages.

Means run over the lines of one noise factor. They are means over few lines at times, so ten lines
of ideal normal noise are mixed in, and b is never taken above, m never below the value for such
noise: a sigma never claims more than normal noise of the stated size would allow. There is no
allowance for the uncertainty of the noise factors themselves, which makes sigmas some 3 % too small
where a factor rests on 17 lines.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import cho_factor, cho_solve, cholesky, solve_triangular

from dunhamfit.algebra.least_squares import Solution
from dunhamfit.algebra.reweighting import SCALE_EFFICIENCY, Problem, State, descend, find_scales
from dunhamfit.algebra.robust import Loss
from dunhamfit.algebra.rows import Rows
from dunhamfit.fit.design import Design
from dunhamfit.fit.noise import Noise, factor_labels
from dunhamfit.lines.line_list import LineList

# As in `dunhamfit.algebra.variance`: fewer degrees of freedom tell no noise factor.
_LEAST_DEGREES = 4.0
# Lines of ideal noise mixed into the means of the covariance.
_IDEAL_LINES = 10.0


@dataclass(frozen=True, eq=False)
class Reweighted:
    """Where the rounds settled.

    Attributes
    ----------
    line_weights : ndarray of float, shape (n_lines,)
        By which 1 / sigma^2 of each line is multiplied, noise factors aside; 1 for lines not used.
    values : ndarray of float, shape (free,)
        Good to 1e-6 sigma: the start of the last refinement.
    factor : ndarray of float, shape (free, free)
        F with covariance F F^T.
    noise : Noise
    log_likelihood : float
        Of the lines and priors if their errors had the density exp(-rho).
    rounds : int
    """

    line_weights: np.ndarray
    values: np.ndarray
    factor: np.ndarray
    noise: Noise
    log_likelihood: float
    rounds: int


def reweight(design: Design, rows: Rows, solution: Solution, *, loss: Loss, policy: str, lines: LineList) -> Reweighted:
    """Weights, noise factors and covariance of a robust fit.

    Parameters
    ----------
    design : Design
        Of the used lines, with their stated uncertainties.
    rows : Rows
        Those of the design, or what is left of them where parameters are held.
    solution : Solution
        Least-squares solution of `rows`, from which residuals are counted.
    loss : Loss
    policy : one of `dunhamfit.fit.noise.POLICIES`
    lines : LineList

    Raises
    ------
    NotConverged
        If the rounds do not settle, or the lines that keep a weight do not determine the model.
        `state` holds the last step in sigma, the factors and the parameters.
    """
    if policy == "stated":
        label, names = np.zeros(len(design.groups), dtype=int), ()
    else:
        label, names = factor_labels(policy, design.groups, lines)
    problem = _problem(design, rows, solution, label, lines)
    least = 1.0 if policy == "common" else _LEAST_DEGREES
    estimated = policy != "stated"
    start = State(np.zeros(problem.basis.shape[1]), np.ones(1), np.array([estimated]))
    near, rounds = find_scales(problem.pooled(), start, least, by_median=True)
    near = State(near.at, np.repeat(near.factors, problem.count), np.full(problem.count, estimated))
    if problem.count > 1:
        near, further = find_scales(problem, near, least, by_median=True)
        rounds += further
    # Far from the solution residuals of 1e9 sigma leave rounding in those of all lines: count them anew from here.
    values = solution.values + solve_triangular(solution.r, near.at)
    line_residuals, prior_residuals = _residuals(design, rows, rows.residuals(values).high, lines)
    problem = replace(problem, start=line_residuals, prior_start=prior_residuals)
    near = replace(near, at=np.zeros_like(near.at))
    state, further = find_scales(problem, near, least, by_median=False)
    state, last = descend(problem, state, loss)
    u = problem.residuals(state.at) / state.factors[problem.label]
    weights = np.ones(len(lines))
    weights[design.used] = loss.weight(u)
    log_sigma = np.log(lines.sigma[design.used] * state.factors[problem.label]).sum()
    prior = problem.prior_residuals(state.at)
    prior_log_sigma = rows.log_sigma[len(design.groups) :].sum()
    return Reweighted(
        line_weights=weights,
        values=values + solve_triangular(solution.r, state.at),
        factor=solve_triangular(solution.r, _covariance_factor(problem, state, u, loss)),
        noise=_noise(policy, names, label, problem, state),
        log_likelihood=float(
            -loss.rho(u).sum()
            - len(u) * loss.log_norm
            - log_sigma
            - (prior @ prior + len(prior) * np.log(2 * np.pi)) / 2
            - prior_log_sigma
        ),
        rounds=rounds + further + last,
    )


def _problem(design: Design, rows: Rows, solution: Solution, label: np.ndarray, lines: LineList) -> Problem:
    """The lines of a fit in the coordinates of its plain solution; `label` is the noise factor of each group."""
    basis = np.ascontiguousarray(solve_triangular(solution.r, rows.whitened.T, trans="T").T)
    data = int(rows.starts[len(design.groups)])
    residual, prior_residual = _residuals(design, rows, solution.residuals.high, lines)
    row_label = np.repeat(label, np.diff(rows.starts[: len(design.groups) + 1]))
    parts = [basis[:data][row_label == k] for k in range(label.max() + 1)]
    line_label = label[design.group_of]
    return Problem(
        basis=basis,
        start=residual,
        prior_start=prior_residual,
        row_of=design.row_of,
        share=1.0 / (lines.sigma[design.used] * rows.scale[design.row_of]),
        label=line_label,
        sizes=np.bincount(line_label),
        grams=np.stack([part.T @ part for part in (*parts, basis[data:])]),
    )


def _residuals(design: Design, rows: Rows, of_rows: np.ndarray, lines: LineList) -> tuple[np.ndarray, np.ndarray]:
    """Residuals of the used lines and of the priors over their stated uncertainties, from those of the rows."""
    row_of, used, observed = design.row_of, design.used, design.rows.observed
    data = int(rows.starts[len(design.groups)])
    from_row = (lines.position[used] - observed.high[row_of]) - observed.low[row_of]
    return (of_rows[row_of] + from_row) / lines.sigma[used], of_rows[data:] * rows.scale[data:]


def _noise(policy: str, names: tuple[str, ...], label: np.ndarray, problem: Problem, state: State) -> Noise:
    if policy == "stated":
        none = np.empty(0)
        return Noise(policy, (), label, none, none, none, np.empty(0, dtype=bool))
    degrees = problem.sizes * (1 - problem.leverages(state.factors))
    information = 2 * SCALE_EFFICIENCY * np.maximum(degrees, np.finfo(float).tiny)
    sigmas = np.where(state.active, state.factors / np.sqrt(information), np.nan)
    return Noise(policy, names, label, state.factors, sigmas, degrees, state.active)


def _covariance_factor(problem: Problem, state: State, u: np.ndarray, loss: Loss) -> np.ndarray:
    """F of the module docstring in the coordinates of `problem`, shape (p, p)."""

    def total(values):
        return np.bincount(problem.label, values, problem.count)

    leverage = problem.leverages(state.factors)
    lines = problem.sizes + _IDEAL_LINES
    slope = loss.slope(u)
    mean = np.minimum((total(slope) + _IDEAL_LINES * loss.consistency) / lines, loss.consistency)
    spread = np.maximum(total(slope**2) / problem.sizes - (total(slope) / problem.sizes) ** 2, 0.0)
    correction = 1 + leverage * spread / mean**2
    free = problem.sizes * (1 - leverage) + _IDEAL_LINES
    square = (total(loss.psi(u) ** 2) + _IDEAL_LINES * loss.mean_square) / free
    square = np.maximum(square, loss.mean_square) * correction**2
    scaled = problem.grams[:-1] / state.factors[:, None, None] ** 2
    bread = np.tensordot(mean, scaled, axes=1) + problem.grams[-1]
    meat = np.tensordot(square, scaled, axes=1) + problem.grams[-1]
    return cho_solve(cho_factor(bread), cholesky(meat, lower=True))
