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

from dunhamfit.algebra.rank import judge
from dunhamfit.algebra.triangle import Triangle, covariance_factor, merge, solve

# The identity is used where (I - S S^T)^-1 is no larger than this: it multiplies the rounding of S, which is some
# eps times the condition of the rows.
_LARGEST = 1e5
# Keeps a group that alone determines a parameter from being singular to the last bit; far below any rounding of S.
_NOT_SINGULAR = 1e-15


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
    groups = [_together(triangles, labels == g, base) for g in range(labels.max() + 1)]
    always = [_together(triangles, labels < 0, base)] if np.any(labels < 0) else []
    whole = merge([*groups, *always], base)
    cases, largest = _by_identity(groups, whole)
    critical = np.flatnonzero(~(largest < _LARGEST))
    if len(critical):
        common = [*always, *(item for item, size in zip(groups, largest, strict=True) if size < _LARGEST)]
        common = [merge(common, base)] if common else []
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


def _together(triangles: list[Triangle], chosen: np.ndarray, base: np.ndarray) -> Triangle:
    members = [triangles[i] for i in np.flatnonzero(chosen)]
    return members[0].shifted(base) if len(members) == 1 else merge(members, base)


def _by_identity(groups: list[Triangle], whole: Triangle) -> tuple[list[_Case], np.ndarray]:
    """Every group by the identity of the module, and the size of each (I - S S^T)^-1."""
    tallest = max(len(item.z) for item in groups)
    rows = np.zeros((len(groups), tallest, whole.parameters))
    z = np.zeros((len(groups), tallest))
    for g, item in enumerate(groups):
        rows[g, : len(item.z)], z[g, : len(item.z)] = item.r, item.z
    factor = covariance_factor(whole.r)
    shares = rows @ factor
    unit = np.eye(tallest)
    rest = (1 + _NOT_SINGULAR) * unit - shares @ shares.transpose(0, 2, 1)
    inverse = np.linalg.solve(rest, np.broadcast_to(unit, rest.shape))
    residual = shares @ whole.z - z
    predicted = np.matmul(inverse, residual[:, :, None])[:, :, 0]
    reach = shares @ factor.T
    values = solve(whole) + np.matmul(predicted[:, None, :], reach)[:, 0]
    variances = (reach * (inverse @ reach)).sum(axis=1)
    rss = np.array([item.rss for item in groups])
    cases = [
        _Case(*case)
        for case in zip(
            values,
            np.sqrt(np.maximum(variances, 0.0)),
            (predicted**2).sum(axis=1) + rss,
            (residual * predicted).sum(axis=1) + rss,
            [item.n for item in groups],
            strict=True,
        )
    ]
    return cases, np.sqrt((inverse**2).sum(axis=(1, 2)))


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
