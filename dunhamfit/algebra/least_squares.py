r"""Weighted linear least squares: orthogonal factor first, then refinement to full precision.

The factor R comes from Householder QR of the whitened rows. The solution is then
refined with residuals in twice the precision,

    r = y - A x,    R^T R dx = A^T W r,    x <- x + dx,

with both products exact to beyond double precision, so that the fixed point is the
solution itself and each round gains about 1 / (eps * condition)
(A. Bjorck, BIT 7, 257 (1967) and Numerical Methods for Least Squares Problems (1996),
sections 2.9 and 6.6). The matrix A^T A is never formed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cholesky
from scipy.linalg.lapack import dtrtrs

from dunhamfit.algebra.extended import Extended, two_sum
from dunhamfit.algebra.rows import Rows
from dunhamfit.algebra.triangle import covariance_factor
from dunhamfit.errors import NotConverged

# The last step, after which the error is smaller than it by the factor that each round gains: a part of the
# sigma of each constant, of which a millionth is promised, or its last places, all that float64 can hold.
_STEP_IN_SIGMA = 1e-6
_LAST_PLACES = 4.0
_ROUNDS = 20


@dataclass(frozen=True, eq=False)
class Solution:
    """Least-squares solution of a set of rows.

    Attributes
    ----------
    values : ndarray of float, shape (p,)
    r : ndarray of float, shape (p, p)
        Upper triangular factor of the whitened rows: the covariance is (R^T R)^-1.
    residuals : Extended, shape (n,)
        y - A x, not whitened.
    chi2 : float
        Weighted sum of squares, spread within pooled repeats included.
    """

    values: np.ndarray
    r: np.ndarray
    residuals: Extended
    chi2: float


def refine(rows: Rows, r: np.ndarray, start: np.ndarray) -> Solution:
    """Least-squares solution by refinement from `start`.

    Parameters
    ----------
    rows : Rows
    r : ndarray of float, shape (p, p)
        Factor of the whitened rows, of full rank.
    start : ndarray of float, shape (p,)

    Raises
    ------
    NotConverged
        If the steps do not die out, which means that R is not the factor of the rows
        or is singular to working precision.
    """
    values = np.array(start, dtype=float)
    small = _STEP_IN_SIGMA * np.sqrt((covariance_factor(r) ** 2).sum(axis=1))
    for _ in range(_ROUNDS):
        residual = rows.residuals(values)
        half = dtrtrs(r, rows.gradient(residual), trans=1)[0]
        step = dtrtrs(r, half)[0]
        values = values + step
        if np.all(np.abs(step) <= np.maximum(small, _LAST_PLACES * np.spacing(np.abs(values)))):
            break
    else:
        raise NotConverged(
            "the refinement of the least-squares solution did not settle; the model is close to undetermined",
            state={"step_in_sigma": float(np.sqrt(half @ half)), "values": values},
        )
    moved = two_sum(residual.high, -rows.matrix.rough_product(step))
    residual = Extended(moved.high, moved.low + residual.low)
    whitened = residual.high * rows.scale
    return Solution(values, r, residual, float(whitened @ whitened) + float(rows.spread.sum()))


def sharpened(rows: Rows, r: np.ndarray) -> np.ndarray:
    """The factor R with its relative error, eps times the condition, brought down to a few eps.

    A R^-1 is nearly orthonormal; formed in extended precision it shows by how much R
    misses, and the Cholesky factor of its (well-conditioned) Gram matrix repairs it
    (the second pass of Cholesky QR: Y. Yamamoto et al., ETNA 44, 306 (2015)).

    Parameters
    ----------
    rows : Rows
    r : ndarray of float, shape (p, p)
        Factor of the whitened rows, condition below some 1e14.
    """
    columns = covariance_factor(r).T
    nearly_orthonormal = np.stack([rows.product(column).high * rows.scale for column in columns])
    return np.triu(cholesky(nearly_orthonormal @ nearly_orthonormal.T) @ r)
