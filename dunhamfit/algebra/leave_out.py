r"""Every group of lines left out in turn, from triangles alone: the solution, its shift, and how it predicts the group.

With R the factor of all rows, S = R_g R^-1 the rows of group g in orthonormal coordinates and
e = R_g c - z_g its residuals at the full solution c, the rows without the group give

    c_(g) = c + R^-1 S^T (I - S S^T)^-1 e,        C_(g) = C + R^-1 S^T (I - S S^T)^-1 S R^-T,

predict the group with the residuals (I - S S^T)^-1 e (the identity behind the PRESS statistic:
D. M. Allen, Technometrics 16, 125 (1974)) and with the covariance I + R_g C_(g) R_g^T =
(I - S S^T)^-1 in units of the lines' variances. The shift c_(g) - c has the covariance C_(g) - C
(J. A. Hausman, Econometrica 46, 1251 (1978)). Where I - S S^T is close to singular, so that
the identity would lose digits, the remaining triangles are merged instead and their rank judged
as that of a fit.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from scipy.linalg import cholesky, qr, solve_triangular
from scipy.linalg.lapack import dpocon, dpotrf, dtrtrs

from dunhamfit.algebra.rank import judge
from dunhamfit.algebra.triangle import Triangle, covariance_factor, merge, solve

# The identity is used where I - S S^T has at least this reciprocal condition: its inverse multiplies the rounding of
# S, which is some eps times the condition of the rows.
_SMALLEST = 1e-5


@dataclass(frozen=True, eq=False)
class LeftOut:
    """What the other rows say without each of G groups; p parameters.

    Attributes
    ----------
    values : ndarray of float, shape (G, p)
        Parameters without the group; those of all rows where they are not determined.
    shift_sigmas : ndarray of float, shape (G, p)
        Standard deviation of the change that leaving the group out makes; infinite where not determined.
    chi2_predicted : ndarray of float, shape (G,)
        Sum of squares of the group's residuals about its prediction, over the uncertainties of its
        lines alone; infinite where not determined.
    chi2_predictive : ndarray of float, shape (G,)
        The same over the full covariance of the prediction: chi-square with `dof` degrees of freedom.
    n, dof : ndarray of int, shape (G,)
        Lines, and lines less the nuisance parameters that the group alone has.
    determined : ndarray of bool, shape (G,)
    lost : tuple of tuple of int, length G
        Parameters that the other rows cannot tell.
    """

    values: np.ndarray
    shift_sigmas: np.ndarray
    chi2_predicted: np.ndarray
    chi2_predictive: np.ndarray
    n: np.ndarray
    dof: np.ndarray
    determined: np.ndarray
    lost: tuple[tuple[int, ...], ...]


def leave_out(triangles, labels, *, nuisance=()) -> LeftOut:
    """Leave each group out of all rows, in turn.

    Parameters
    ----------
    triangles : sequence of Triangle, length T, all with the same p
        With the noise factors in force. Together they must determine every parameter.
    labels : array_like of int, shape (T,)
        Group 0 .. G-1 of each triangle; -1 for those that always stay, such as priors.
    nuisance : sequence of int
        Parameters that vanish with the last group that has them (calibration terms), instead of
        being counted as not determined. The group is then judged at their best values.

    Returns
    -------
    LeftOut
    """
    triangles, labels = list(triangles), np.asarray(labels)
    base = triangles[0].base
    members = [[] for _ in range(labels.max() + 1)]
    always = []
    for label, item in zip(labels, triangles, strict=True):
        (members[label] if label >= 0 else always).append(item)
    groups = [_together(item, base) for item in members]
    always = [_together(always, base)] if always else []
    whole = merge([*groups, *always], base)
    factor = covariance_factor(whole.r)
    cases = [_by_identity(group, whole, factor) for group in groups]
    critical = [g for g, case in enumerate(cases) if case is None]
    common = [*always, *(group for group, case in zip(groups, cases, strict=True) if case is not None)]
    common = [merge(common, base)] if common and critical else []
    for g in critical:
        rest = [*common, *(groups[h] for h in critical if h != g)]
        cases[g] = _by_merging(groups[g], rest, whole, np.asarray(nuisance, dtype=int))
    return LeftOut(
        **{item.name: np.array([getattr(case, item.name) for case in cases]) for item in fields(_Case)[:-1]},
        n=np.array([item.n for item in groups]),
        determined=np.array([not case.lost for case in cases]),
        lost=tuple(case.lost for case in cases),
    )


@dataclass(frozen=True, eq=False)
class _Case:
    """The entries of LeftOut for one group."""

    values: np.ndarray
    shift_sigmas: np.ndarray
    chi2_predicted: float
    chi2_predictive: float
    dof: int
    lost: tuple[int, ...] = ()


def _together(members: list[Triangle], base: np.ndarray) -> Triangle:
    if len(members) > 1:
        return merge(members, base)
    return members[0] if members[0].base is base else members[0].shifted(base)


def _by_identity(group: Triangle, whole: Triangle, factor: np.ndarray) -> _Case | None:
    """One group by the identity of the module; None where I - S S^T is too close to singular."""
    share = group.r @ factor
    rest = np.eye(len(share)) - share @ share.T
    lower, failed = dpotrf(rest, lower=1)
    if failed or dpocon(lower, float(np.abs(rest).sum(axis=0).max()), uplo="L")[0] < _SMALLEST:
        return None
    residual = share @ whole.z - group.z
    half = dtrtrs(lower, np.column_stack([residual, share @ factor.T]), lower=1)[0]
    half_residual, half_reach = half[:, 0], half[:, 1:]
    predicted = dtrtrs(lower, half_residual, lower=1, trans=1)[0]
    return _Case(
        solve(whole) + half_residual @ half_reach,
        np.sqrt((half_reach**2).sum(axis=0)),
        float(predicted @ predicted) + group.rss,
        float(half_residual @ half_residual) + group.rss,
        group.n,
    )


def _by_merging(group: Triangle, rest: list[Triangle], whole: Triangle, nuisance: np.ndarray) -> _Case:
    """One group from a merge of all other triangles."""
    width = whole.parameters
    values, spread = solve(whole), np.zeros(width)
    present = sum((np.abs(item.r).sum(axis=0) for item in rest), np.zeros(width)) > 0
    own = nuisance[~present[nuisance]]
    kept = np.setdiff1d(np.arange(width), own)
    others = merge(rest, group.base).chosen(kept) if rest else None
    lost = judge(others.r).dependent if others is not None else tuple(range(len(kept)))
    if lost:
        return _Case(values, np.full(width, np.inf), np.inf, np.inf, group.n, tuple(int(kept[i]) for i in lost))
    values[kept] = solve(others)
    factor = covariance_factor(others.r)
    before = (factor**2).sum(axis=1)
    spread[kept] = np.sqrt(np.maximum(before - (covariance_factor(whole.r)[kept] ** 2).sum(axis=1), 0.0))
    # Where the group alone has calibration terms, it is judged by what is left across them.
    across = qr(group.r[:, own])[0][:, len(own) :].T if len(own) else np.eye(len(group.z))
    residual = across @ (group.r[:, kept] @ (values[kept] - group.base[kept]) - group.z)
    reach = across @ group.r[:, kept] @ factor
    half = solve_triangular(cholesky(np.eye(len(reach)) + reach @ reach.T, lower=True), residual, lower=True)
    return _Case(
        values,
        spread,
        float(residual @ residual) + group.rss,
        float(half @ half) + group.rss,
        group.n - len(own),
    )
