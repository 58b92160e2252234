r"""Gaussian algebra on Gram matrices in whitened coordinates, for many weightings at once.

The Gram matrix of rows V with right side r is K = [V r]^T [V r], so that

    |r - V u|^2 = (u, -1) K (u, -1)^T.

Its Cholesky factor C (lower, K = C C^T) holds everything that is asked of the Gaussian in
u: with p coordinates, the sum of squares at the least-squares u is C[p, p]^2, the
determinant of V^T V is the squared product of C's first p diagonal entries, and
C[:p, :p]^T u = C[p, :p]^T is solved by the least-squares u.

Gram matrices square the condition. They are used only in coordinates in which the
Gaussian is near the unit one, where nothing is lost, and never for the answer of a fit.
"""

from __future__ import annotations

import numpy as np


def gram(rows: np.ndarray, right: np.ndarray) -> np.ndarray:
    """K of rows, shape (n, p), with a right side, shape (n,): an array of shape (p + 1, p + 1)."""
    whole = np.column_stack([rows, right])
    return whole.T @ whole


def sum_of_squares(grams: np.ndarray, u: np.ndarray) -> np.ndarray:
    """|r - V u|^2 for each pair of a Gram matrix, shape (g, p + 1, p + 1), and a u, shape (w, p).

    Returns
    -------
    ndarray of float, shape (w, g)
    """
    augmented = np.append(u, np.full((len(u), 1), -1.0), axis=1)
    return np.einsum("gwj,wj->wg", augmented @ grams, augmented)


def factorise(grams: np.ndarray) -> np.ndarray:
    """Cholesky factor C of each Gram matrix, shape (w, p + 1, p + 1)."""
    return np.linalg.cholesky(grams)


def log_integral(factors: np.ndarray) -> np.ndarray:
    """ln of the integral of exp(-|r - V u|^2 / 2) over u, without (p/2) ln 2 pi; shape (w,)."""
    diagonal = np.diagonal(factors, axis1=1, axis2=2)
    return -0.5 * diagonal[:, -1] ** 2 - np.log(diagonal[:, :-1]).sum(axis=1)


def draw(factors: np.ndarray, random: np.random.RandomState) -> np.ndarray:
    """One draw of u from the Gaussian of each factor, shape (w, p).

    Back substitution runs over the coordinates, each step for all factors together.
    """
    size = factors.shape[1] - 1
    u = factors[:, size, :size] + random.standard_normal((len(factors), size))
    for j in range(size - 1, -1, -1):
        u[:, j] /= factors[:, j, j]
        u[:, :j] -= factors[:, j, :j] * u[:, j : j + 1]
    return u
