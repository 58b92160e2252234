"""Can the rows determine the parameters? Judged on columns of unit norm, never answered by truncation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import svd
from scipy.linalg.lapack import dgeqrf, dgesdd

# Rounding leaves a singular matrix with a smallest singular value of some 1e-16 of the largest.
# Below 1e-13 the sigma of the worst direction would itself be known to three digits or fewer.
SINGULAR_BELOW = 1e-13


@dataclass(frozen=True, eq=False)
class Rank:
    """What a factor says of the parameters.

    Attributes
    ----------
    condition : float
        Of the factor with columns of unit norm; infinite if a column is empty.
    dependent : tuple of int
        Columns that cannot be told from those before them, as many as there are null directions.
    null : ndarray of float, shape (q, p)
        Null directions, in the unit-norm columns; one for each entry of `dependent`.
    """

    condition: float
    dependent: tuple[int, ...]
    null: np.ndarray


def judge(r: np.ndarray, order=None) -> Rank:
    """Rank and condition of the factor of whitened rows.

    Parameters
    ----------
    r : ndarray of float, shape (m, p)
    order : sequence of int, optional
        Columns from the most to the least wanted: the last ones are called dependent first.
    """
    width = r.shape[1]
    norms = np.sqrt(np.einsum("ij,ij->j", r, r))
    empty = norms == 0
    scaled = r / np.where(empty, 1.0, norms)
    singular = np.zeros(width)
    singular[: min(r.shape)] = dgesdd(scaled, compute_uv=False)[1]
    lost = int(np.sum(singular <= SINGULAR_BELOW * singular[0]))
    if not lost:
        return Rank(float(singular[0] / singular[-1]), (), np.empty((0, width)))
    directions = svd(scaled, check_finite=False)[2]
    order = np.arange(width) if order is None else np.asarray(order)
    return Rank(float("inf"), _last_dependent(scaled, order, lost), directions[width - lost :])


def _last_dependent(scaled: np.ndarray, order: np.ndarray, count: int) -> tuple[int, ...]:
    """The `count` columns that lie closest to the span of those before them in `order`."""
    height = max(scaled.shape)  # padded with zero rows so that every column has a diagonal entry
    padded = np.zeros((height, scaled.shape[1]), order="F")
    padded[: len(scaled)] = scaled[:, order]
    apart = np.abs(np.diag(dgeqrf(padded)[0]))
    closest = np.sort(np.argsort(apart, kind="stable")[:count])
    return tuple(int(column) for column in order[closest])
