"""Least squares whose unknowns lie in a chain of shells: the triangle R, solutions and leverages.

Levels sorted by J form such a chain, since a line joins levels of one shell or of two
neighbouring ones. Householder reduction then runs shell by shell, carrying what is left over
to the next shell (Golub and Van Loan, Matrix Computations, 4th ed., sections 4.5 and 5.2, on
block-tridiagonal systems and orthogonal reduction). A few further unknowns, the border, may
touch every row; they are eliminated last. The work grows with the number of shells, not with
the cube of the number of levels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular


@dataclass(frozen=True, eq=False)
class Rows:
    """A sparse matrix with few entries a row.

    Attributes
    ----------
    index : ndarray of int, shape (n, w)
        Column of each entry; `unknowns` stands for "no entry".
    coefficient : ndarray of float, shape (n, w)
    unknowns : int
        Number of columns.
    """

    index: np.ndarray
    coefficient: np.ndarray
    unknowns: int

    def times(self, x: np.ndarray) -> np.ndarray:
        """A x, shape (n,)."""
        return np.sum(self.coefficient * np.append(x, 0.0)[self.index], axis=1)

    def transposed_times(self, y: np.ndarray) -> np.ndarray:
        """A' y, shape (unknowns,)."""
        products = (self.coefficient * y[:, None]).ravel()
        return np.bincount(self.index.ravel(), weights=products, minlength=self.unknowns + 1)[:-1]


@dataclass(frozen=True, eq=False)
class ShellFactor:
    """The triangle R of whitened rows A = Q R, kept shell by shell.

    Attributes
    ----------
    rows : Rows
    bounds : ndarray of int, shape (shells + 1,)
        Shell s holds the unknowns `bounds[s]` to `bounds[s + 1] - 1`; those from `bounds[-1]` on
        are the border.
    groups : tuple of ndarray of int
        The rows whose lowest shell is s; a last group holds the rows of the border alone.
    inverse : tuple of ndarray, each (n_s, n_s)
        Inverse of the diagonal triangle of each shell.
    coupling : tuple of ndarray, each (n_s, n_next + n_border)
        The rest of its rows of R.
    corner : ndarray, shape (n_border, n_border)
        Inverse of the triangle of the border.
    """

    rows: Rows
    bounds: np.ndarray
    groups: tuple[np.ndarray, ...]
    inverse: tuple[np.ndarray, ...]
    coupling: tuple[np.ndarray, ...]
    corner: np.ndarray

    def solve(self, y: np.ndarray) -> np.ndarray:
        """The x that minimises |A x - y|, shape (unknowns,).

        R'R x = A'y, then once more for the residual: the corrected seminormal equations
        (Bjorck 1987, Linear Algebra Appl. 88/89, 31; from memory), about as accurate as
        keeping Q.
        """
        x = self._seminormal(self.rows.transposed_times(y))
        return x + self._seminormal(self.rows.transposed_times(y - self.rows.times(x)))

    def residuals(self, y: np.ndarray) -> np.ndarray:
        """y - A x at the solution, shape (n,): the projection of y that no unknown can absorb."""
        return y - self.rows.times(self.solve(y))

    def border_covariance(self) -> np.ndarray:
        """Covariance of the border unknowns, shape (n_border, n_border)."""
        return self.corner @ self.corner.T

    def leverages(self) -> np.ndarray:
        """Diagonal of A (A'A)^-1 A', shape (n,).

        Backwards, with a root F (F F' = covariance) of two shells and the border at a time. Roots keep
        the digits that differences of covariances would lose where uncertainties are very uneven.
        """
        leverage = np.zeros(len(self.rows.index))
        levels = self.bounds[-1]
        tail = self.corner
        self._gather(leverage, self.groups[-1], tail, levels, levels)
        for s in range(len(self.inverse) - 1, -1, -1):
            start, stop, after = self._span(s)
            own = stop - start
            root = np.zeros((own + len(tail), own + tail.shape[1]))
            root[:own, :own] = self.inverse[s]
            root[:own, own:] = -self.inverse[s] @ (self.coupling[s] @ tail)
            root[own:, own:] = tail
            self._gather(leverage, self.groups[s], root, start, after)
            # The next shell has served: what is kept is this one and the border, as a triangle again.
            kept = np.delete(root, slice(own, own + after - stop), axis=0)
            tail = np.linalg.qr(kept.T, mode="r").T
        return leverage

    def _span(self, s: int) -> tuple[int, int, int]:
        """First unknown of shell s, of the next shell, and of the one after that."""
        return self.bounds[s], self.bounds[s + 1], self.bounds[min(s + 2, len(self.bounds) - 1)]

    def _gather(self, leverage, group, root, start, after):
        """Write |a' F|^2 for the rows of `group`; F belongs to the unknowns start..after-1 and the border."""
        local = _local(self.rows.index[group], start, after, self.bounds[-1])
        padded = np.vstack([root, np.zeros(root.shape[1])])
        whole = np.einsum("ni,nik->nk", self.rows.coefficient[group], padded[local])
        leverage[group] = np.sum(whole**2, axis=1)

    def _seminormal(self, right: np.ndarray) -> np.ndarray:
        """x of R'R x = right."""
        x = right.copy()
        levels = self.bounds[-1]
        for s, (inverse, coupling) in enumerate(zip(self.inverse, self.coupling, strict=True)):
            start, stop, after = self._span(s)
            x[start:stop] = inverse.T @ x[start:stop]
            passed = coupling.T @ x[start:stop]
            x[stop:after] -= passed[: after - stop]
            x[levels:] -= passed[after - stop :]
        x[levels:] = self.corner @ (self.corner.T @ x[levels:])
        for s in range(len(self.inverse) - 1, -1, -1):
            start, stop, after = self._span(s)
            later = np.concatenate([x[stop:after], x[levels:]])
            x[start:stop] = self.inverse[s] @ (x[start:stop] - self.coupling[s] @ later)
        return x


def factorise(rows: Rows, bounds: np.ndarray) -> ShellFactor:
    """Reduce whitened rows shell by shell.

    Parameters
    ----------
    rows : Rows
        Each row touches unknowns of one shell, or of two neighbouring shells, and of the border.
        The matrix has full column rank, and so has its part without the border.
    bounds : ndarray of int, shape (shells + 1,)
        See `ShellFactor`.
    """
    levels, border = bounds[-1], rows.unknowns - bounds[-1]
    shells = len(bounds) - 1
    shell = np.where(rows.index < levels, np.searchsorted(bounds, rows.index, side="right") - 1, shells)
    lowest = shell.min(axis=1)
    groups = tuple(np.flatnonzero(lowest == s) for s in range(shells + 1))

    inverse, coupling = [], []
    carry = np.zeros((0, (bounds[1] if shells else 0) + border))
    for s in range(shells):
        start, stop, after = bounds[s], bounds[s + 1], bounds[min(s + 2, shells)]
        own = stop - start
        block = _dense(rows, groups[s], start, after, levels)
        # What was carried knows this shell and the border, but nothing yet of the next shell.
        widened = np.insert(carry, np.full(after - stop, own), 0.0, axis=1)
        triangle = np.linalg.qr(np.vstack([widened, block]), mode="r")
        inverse.append(_inverse(triangle[:own, :own]))
        coupling.append(triangle[:own, own:])
        carry = triangle[own:, own:]
    last = np.vstack([carry, _dense(rows, groups[shells], levels, levels, levels)])
    corner = _inverse(np.linalg.qr(last, mode="r")) if border else np.zeros((0, 0))
    return ShellFactor(rows, bounds, groups, tuple(inverse), tuple(coupling), corner)


def _local(index: np.ndarray, start: int, after: int, levels: int) -> np.ndarray:
    """Columns within a block that holds the unknowns start..after-1 and then the border."""
    return np.where(index < levels, index - start, index - levels + after - start)


def _dense(rows: Rows, group: np.ndarray, start: int, after: int, levels: int) -> np.ndarray:
    """The rows of `group` as a dense block over the unknowns start..after-1 and the border."""
    local = _local(rows.index[group], start, after, levels)
    block = np.zeros((len(group), after - start + rows.unknowns - levels + 1))
    np.add.at(block, (np.arange(len(group))[:, None], local), rows.coefficient[group])
    return block[:, :-1]


def _inverse(triangle: np.ndarray) -> np.ndarray:
    if not len(triangle):
        return triangle
    return solve_triangular(triangle, np.eye(len(triangle)), check_finite=False)
