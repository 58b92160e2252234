"""The triangles of a fit with the noise factors in force: where resampling, influence and residual tests start."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from dunhamfit.algebra.triangle import Triangle, merge
from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit

# The least-squares solution of the triangles may lie this far, in sigma, from the values of the fit.
_SAME = 1e-3


@dataclass(frozen=True, eq=False)
class Weighted:
    """Triangles of the free parameters about the values of a fit, noise factors included.

    Attributes
    ----------
    groups : tuple of Triangle
        One a group of lines, in the order of `Fit.groups`.
    priors : tuple of Triangle
        One if there are priors, else none.
    whole : Triangle
        All of them merged.
    free : ndarray of int, shape (q,)
        Place of each free parameter among all.
    """

    groups: tuple[Triangle, ...]
    priors: tuple[Triangle, ...]
    whole: Triangle
    free: np.ndarray

    def shares(self, triangle: Triangle) -> np.ndarray:
        """Rows of a triangle in the coordinates in which all rows together are orthonormal, R_g R^-1, shape (m, q)."""
        return solve_triangular(self.whole.r, triangle.r.T, trans="T").T


def weighted_triangles(fit: Fit) -> Weighted:
    """Triangles of a plain fit; the weights of a robust one are held.

    Raises
    ------
    UsageError
        If relations, bounds or a potential tie the parameters to each other.
    """
    weighted = _weighted(fit)
    if _tied(fit, weighted):
        raise UsageError(
            "this works on fits whose parameters are free of each other; here relations, bounds or a potential tie "
            "them. Fit without these first"
        )
    return weighted


def is_tied(fit: Fit) -> bool:
    """Whether relations, bounds or a potential tie the parameters of a fit to each other."""
    return _tied(fit, _weighted(fit))


def _tied(fit: Fit, weighted: Weighted) -> bool:
    """Free parameters are as many as the directions of F, and solve the least-squares problem of the lines."""
    return fit.factor.shape[1] != len(weighted.free) or float(np.max(np.abs(weighted.whole.z), initial=0.0)) > _SAME


def _weighted(fit: Fit) -> Weighted:
    free = np.flatnonzero(~fit.model.fixed)
    triangles = fit.triangles
    if len(free) < len(fit.values):
        triangles = tuple(item.chosen(free) for item in triangles)
    count = len(fit.groups)
    groups = tuple(item.scaled(factor) for item, factor in zip(triangles[:count], fit.noise.by_group, strict=True))
    priors = tuple(triangles[count:])
    return Weighted(groups, priors, merge([*groups, *priors]), free)


@dataclass(frozen=True, eq=False)
class WeightedLines:
    """The used lines of a fit, whitened and in the orthonormal coordinates of `Weighted.shares`.

    Line i has the row root[i] * shares[row_of[i]]: repeats of one transition share a row.

    Attributes
    ----------
    shares : ndarray of float, shape (rows, q)
    row_of : ndarray of int, shape (n_used,)
    root : ndarray of float, shape (n_used,)
        Square root of the part that the line has in the weight of its row.
    scale : ndarray of float, shape (n_used,), 1/cm-1
        1 / sigma of the line, noise factor and robust weight included.
    residuals : ndarray of float, shape (n_used,)
        Observed less calculated, times `scale`.
    """

    shares: np.ndarray
    row_of: np.ndarray
    root: np.ndarray
    scale: np.ndarray
    residuals: np.ndarray


def weighted_lines(fit: Fit, weighted: Weighted) -> WeightedLines:
    """Rows and residuals of the used lines; `weighted` is that of the same fit."""
    design, lines = fit.design, fit.lines
    rows = int(design.rows.starts[len(fit.groups)])
    factor = np.repeat(fit.noise.by_group, np.diff(design.rows.starts[: len(fit.groups) + 1]))
    whitened = design.rows.whitened[:rows, weighted.free] / factor[:, None]
    scale = 1.0 / lines.sigma[design.used] / factor[design.row_of]
    if fit.line_weights is not None:
        scale = scale * np.sqrt(fit.line_weights[design.used])
    return WeightedLines(
        shares=solve_triangular(weighted.whole.r, whitened.T, trans="T").T,
        row_of=design.row_of,
        root=scale / (design.rows.scale[:rows] / factor)[design.row_of],
        scale=scale,
        residuals=fit.residuals[design.used] * scale,
    )
