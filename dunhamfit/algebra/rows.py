"""Rows of a linear least-squares problem, held so that residuals can be had to twice the precision.

The exact product A x is needed because positions are up to 1e9 times their sigma.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from dunhamfit.algebra.extended import Extended, exact, subtract, two_product
from dunhamfit.algebra.matrix import Matrix
from dunhamfit.algebra.triangle import Triangle, block_edges, reduce_blocks


@dataclass(frozen=True, eq=False)
class Rows:
    """Rows y_i = a_i . x with 1-sigma 1 / scale_i, in contiguous groups.

    Attributes
    ----------
    matrix : Matrix, shape (p, n)
        One column of the design for each first index.
    observed : Extended, shape (n,)
    scale : ndarray of float, shape (n,)
        1 / sigma of the row.
    starts : ndarray of int, shape (groups + 1,)
        Rows `starts[g]` up to `starts[g + 1]` form group g.
    lines : ndarray of int, shape (groups,)
        Number of lines in each group; more than its rows where repeats were pooled.
    spread : ndarray of float, shape (groups,)
        Weighted sum of squares within pooled repeats.
    log_sigma : ndarray of float, shape (groups,)
        Sum of ln(sigma) over the lines of each group.
    """

    matrix: Matrix
    observed: Extended
    scale: np.ndarray
    starts: np.ndarray
    lines: np.ndarray
    spread: np.ndarray
    log_sigma: np.ndarray

    @property
    def parameters(self) -> int:
        return self.matrix.shape[0]

    @property
    def whitened(self) -> np.ndarray:
        """Design rows divided by sigma, shape (n, p), made anew at each call."""
        return self._whitened(0, len(self.scale))

    def _whitened(self, start: int, stop: int) -> np.ndarray:
        entries = self.matrix.rounded(start, stop)
        entries *= self.scale[start:stop]
        return entries.T

    def residuals(self, values: np.ndarray) -> Extended:
        """y - A x to some 28 digits, shape (n,).

        Parameters
        ----------
        values : ndarray of float, shape (p,)
        """
        return subtract(self.observed, self.product(values))

    def product(self, values: np.ndarray) -> Extended:
        """A x to some 28 digits, shape (n,)."""
        return self.matrix.transposed_product(values)

    def gradient(self, residual: Extended) -> np.ndarray:
        """A^T W r for the residuals r, W = 1 / sigma^2, to well beyond double precision, shape (p,)."""
        return self.matrix.product(_weighted(residual, self.scale))

    def held(self, columns, values) -> Rows:
        """The rows of the model in which `columns` are fixed at `values` and taken to the left side."""
        columns = np.asarray(columns, dtype=int)
        fixed = np.zeros(self.parameters)
        fixed[columns] = values
        free = np.setdiff1d(np.arange(self.parameters), columns)
        return replace(self, matrix=self.matrix.chosen(free), observed=self.residuals(fixed))

    def reweighted(self, factors: np.ndarray) -> Rows:
        """The rows with every sigma of group g multiplied by `factors[g]`."""
        each = np.repeat(1.0 / factors, np.diff(self.starts))
        return replace(
            self,
            scale=self.scale * each,
            spread=self.spread / factors**2,
            log_sigma=self.log_sigma + self.lines * np.log(factors),
        )

    def triangle(self) -> Triangle:
        """One triangle of all rows about zero."""
        whitened = self.observed.high * self.scale
        return reduce_blocks(
            self._blocks(0, len(self.scale), whitened),
            np.zeros(self.parameters),
            n=int(self.lines.sum()),
            rss=float(self.spread.sum()),
            log_sigma=float(self.log_sigma.sum()),
        )

    def triangles(self, base: np.ndarray) -> tuple[Triangle, ...]:
        """The triangle of each group about `base`, shape (p,)."""
        whitened = self.residuals(base).high * self.scale
        return tuple(
            reduce_blocks(
                self._blocks(start, stop, whitened),
                base,
                n=int(self.lines[g]),
                rss=float(self.spread[g]),
                log_sigma=float(self.log_sigma[g]),
            )
            for g, (start, stop) in enumerate(pairwise(self.starts.tolist()))
        )

    def _blocks(self, start: int, stop: int, residual: np.ndarray):
        """Whitened rows and residuals, a block at a time: the whole design is never held."""
        edges = block_edges(start, stop, self.parameters)
        for low, high in pairwise(edges):
            yield self._whitened(low, high), residual[low:high]


def plain_rows(matrix, observed, sigma=None) -> Rows:
    """Rows of one group from ordinary arrays.

    Parameters
    ----------
    matrix : ndarray of float, shape (n, p), or Extended of that shape
    observed : ndarray of float, shape (n,), or Extended of that shape
    sigma : ndarray of float, shape (n,), optional
        1 sigma of each; 1 if not given.
    """
    matrix = matrix if isinstance(matrix, Extended) else exact(matrix)
    count = len(matrix.high)
    sigma = np.ones(count) if sigma is None else np.asarray(sigma, dtype=float)
    return Rows(
        matrix=Matrix.plain(matrix.T),
        observed=observed if isinstance(observed, Extended) else exact(observed),
        scale=1.0 / sigma,
        starts=np.array([0, count]),
        lines=np.array([count]),
        spread=np.zeros(1),
        log_sigma=np.array([np.log(sigma).sum()]),
    )


def _weighted(residual: Extended, scale: np.ndarray) -> Extended:
    """residual * weight, keeping the low part, shape (n,); the weight is the square of the scale, rounded."""
    weight = scale * scale
    high, error = two_product(residual.high, weight)
    return Extended(high, error + residual.low * weight)
