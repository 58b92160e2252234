r"""Triangles: the QR summary of a group of whitened rows, and what can be done with it alone.

A triangle stands for the rows (A, y, sigma) of its group through

    sum_i (y_i - a_i . c)^2 / sigma_i^2 = |R (c - base) - z|^2 + rss     for every c,

with R of shape (m, p), m <= p, upper trapezoidal. It is taken about a `base` near the
solution, since positions are up to 1e9 times their sigma: z and rss then hold small
numbers. The rule of the fast merge is that of orthogonal reduction of stacked
triangles (Golub and Van Loan, Matrix Computations, 4th ed., section 5.2; common
practice in sequential least squares).
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.linalg.lapack import dgeqrf, dgeqrt, dtrtri, dtrtrs

# Entries of a block that is reduced at once, and columns of a panel within it. So small, blocks stay in the
# cache, and no step is large enough for OpenBLAS to start threads, which cost more here than they save.
_BLOCK, _PANEL = 20_000, 8
# Below so many entries panels cost more than they save.
_SMALL = 5000


@dataclass(frozen=True, eq=False)
class Triangle:
    """QR summary of a group of rows.

    Attributes
    ----------
    r : ndarray of float, shape (m, p)
        Upper trapezoidal factor of the whitened rows; m <= p.
    z : ndarray of float, shape (m,)
        Rotated whitened residuals about `base`.
    rss : float
        Weighted sum of squares that no parameter can reduce.
    n : int
        Number of lines (repeats of one transition count).
    base : ndarray of float, shape (p,)
        The parameters about which residuals are taken.
    log_sigma : float
        Sum of ln(sigma) over the lines, for likelihoods.
    """

    r: np.ndarray
    z: np.ndarray
    rss: float
    n: int
    base: np.ndarray
    log_sigma: float = 0.0

    @property
    def parameters(self) -> int:
        return self.r.shape[1]

    def scaled(self, factor: float) -> Triangle:
        """The triangle with every sigma of the group multiplied by `factor`."""
        return Triangle(
            self.r / factor,
            self.z / factor,
            self.rss / factor**2,
            self.n,
            self.base,
            self.log_sigma + self.n * float(np.log(factor)),
        )

    def shifted(self, base: np.ndarray) -> Triangle:
        """The same rows with residuals about another base: z' = z + R (base - base')."""
        moved = self.z + self.r @ (self.base - base)
        return Triangle(self.r, moved, self.rss, self.n, np.asarray(base, dtype=float), self.log_sigma)

    def chosen(self, columns) -> Triangle:
        """The triangle of the model that keeps only `columns` (indices), the others fixed at their base."""
        columns = np.asarray(columns)
        return reduce_rows(
            self.r[:, columns], self.z, self.base[columns], n=self.n, rss=self.rss, log_sigma=self.log_sigma
        )

    def chi2(self, values: np.ndarray) -> float:
        """Weighted sum of squares at `values`, shape (p,)."""
        step = self.r @ (values - self.base) - self.z
        return float(step @ step) + self.rss


def reduce_rows(rows, residual, base, *, n: int, rss: float = 0.0, log_sigma: float = 0.0) -> Triangle:
    """Triangle of whitened rows.

    Parameters
    ----------
    rows : ndarray of float, shape (m, p)
        Whitened design rows; not modified.
    residual : ndarray of float, shape (m,)
        Whitened residuals about `base`.
    base : ndarray of float, shape (p,)
    n : int
        Number of lines that the rows stand for.
    rss : float
        Sum of squares already outside the reach of the parameters (spread within repeats).
    """
    edges = block_edges(0, *rows.shape)
    blocks = ((rows[low:high], residual[low:high]) for low, high in pairwise(edges))
    return reduce_blocks(blocks, base, n=n, rss=rss, log_sigma=log_sigma)


def reduce_blocks(blocks, base, *, n: int, rss: float = 0.0, log_sigma: float = 0.0) -> Triangle:
    """Triangle of whitened rows that come in blocks; the other parameters are those of `reduce_rows`.

    Parameters
    ----------
    blocks : iterable of (rows, residual), of shapes (m, p) and (m,)
        Best of the size that `block_edges` makes.
    """
    base = np.asarray(base, dtype=float)
    columns = base.size
    above = np.empty((0, columns + 1))
    below = np.tri(columns + 1, k=-1, dtype=bool)
    for rows, residual in blocks:
        kept = len(above)
        stacked = np.empty((kept + len(residual), columns + 1), order="F")
        stacked[:kept] = above
        stacked[kept:, :columns] = rows
        stacked[kept:, columns] = residual
        above = _factor(stacked)[: columns + 1]
        above[below[: len(above)]] = 0.0
    height = min(len(above), columns)
    if len(above) > columns:
        rss += float(above[columns, columns]) ** 2
    return Triangle(
        np.ascontiguousarray(above[:height, :columns]), np.array(above[:height, columns]), rss, n, base, log_sigma
    )


def _factor(stacked: np.ndarray) -> np.ndarray:
    """Householder QR in place: R on and above the diagonal."""
    if stacked.size < _SMALL:
        return dgeqrf(stacked, overwrite_a=True)[0]
    return dgeqrt(min(_PANEL, *stacked.shape), stacked, overwrite_a=True)[0]


def block_edges(start: int, stop: int, parameters: int) -> list[int]:
    """Edges of blocks of rows for `reduce_blocks`, of nearly equal length, from `start` to `stop`."""
    longest = max(_BLOCK // (parameters + 1) - (parameters + 1), 2 * (parameters + 1))
    count = max(1, -(-(stop - start) // longest))
    return [start + (stop - start) * i // count for i in range(count + 1)]


def merge(triangles, base=None) -> Triangle:
    """One triangle for several groups; those about other bases are shifted first.

    Parameters
    ----------
    triangles : sequence of Triangle, at least one, all with the same p
    base : ndarray of float, shape (p,), optional
        Base of the result; by default that of the first triangle.
    """
    triangles = list(triangles)
    base = triangles[0].base if base is None else np.asarray(base, dtype=float)
    moved = [item if item.base is base else item.shifted(base) for item in triangles]
    return reduce_rows(
        np.concatenate([item.r for item in moved]),
        np.concatenate([item.z for item in moved]),
        base,
        n=sum(item.n for item in moved),
        rss=float(sum(item.rss for item in moved)),
        log_sigma=float(sum(item.log_sigma for item in moved)),
    )


def solve(triangle: Triangle) -> np.ndarray:
    """Least-squares parameters of a square, non-singular triangle, shape (p,).

    Judge the rank first (`dunhamfit.algebra.rank`): this only substitutes back.
    """
    return triangle.base + dtrtrs(triangle.r, triangle.z)[0]


def covariance_factor(r: np.ndarray) -> np.ndarray:
    """F = R^-1, upper triangular, shape (p, p), so that the covariance is F F^T.

    The covariance is never formed by inverting R^T R, whose condition is the square.
    """
    return dtrtri(r)[0]
