"""Rows of a linear least-squares problem, held so that residuals can be had to twice the precision.

The exact product A x is needed because positions are up to 1e9 times their sigma. Each
column is cut into fixed-point slices so narrow that products and sums of two slices
are exact in float64, which leaves the work to matrix multiplication
(K. Ozaki, T. Ogita, S. Oishi and S. M. Rump, Numer. Algorithms 59, 95 (2012)).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from dunhamfit.algebra.extended import Extended, exact, two_product, two_sum
from dunhamfit.algebra.triangle import Triangle, reduce_rows


@dataclass(frozen=True, eq=False)
class Rows:
    """Rows y_i = a_i . x with 1-sigma 1 / scale_i, in contiguous groups.

    Attributes
    ----------
    matrix : Extended, shape (p, n)
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

    matrix: Extended
    observed: Extended
    scale: np.ndarray
    starts: np.ndarray
    lines: np.ndarray
    spread: np.ndarray
    log_sigma: np.ndarray

    @property
    def parameters(self) -> int:
        return self.matrix.high.shape[0]

    @cached_property
    def slices(self) -> _Slices:
        return _Slices(self.matrix)

    @cached_property
    def whitened(self) -> np.ndarray:
        """Design rows divided by sigma, shape (n, p)."""
        return (self.matrix.high * self.scale).T

    def residuals(self, values: np.ndarray) -> Extended:
        """y - A x to some 30 digits, shape (n,).

        Parameters
        ----------
        values : ndarray of float, shape (p,)
        """
        return self.slices.residual(self.observed, values)

    def product(self, values: np.ndarray) -> Extended:
        """A x to some 30 digits, shape (n,)."""
        zero = np.zeros_like(self.scale)
        negative = self.slices.residual(Extended(zero, zero), values)
        return Extended(-negative.high, -negative.low)

    def held(self, columns, values) -> Rows:
        """The rows of the model in which `columns` are fixed at `values` and taken to the left side."""
        columns = np.asarray(columns, dtype=int)
        fixed = np.zeros(self.parameters)
        fixed[columns] = values
        free = np.setdiff1d(np.arange(self.parameters), columns)
        matrix = Extended(self.matrix.high[free], self.matrix.low[free])
        return Rows(
            matrix, self.residuals(fixed), self.scale, self.starts, self.lines, self.spread, self.log_sigma
        )

    def reweighted(self, factors: np.ndarray) -> Rows:
        """The rows with every sigma of group g multiplied by `factors[g]`."""
        each = np.repeat(1.0 / factors, np.diff(self.starts))
        return Rows(
            self.matrix,
            self.observed,
            self.scale * each,
            self.starts,
            self.lines,
            self.spread / factors**2,
            self.log_sigma + self.lines * np.log(factors),
        )

    def triangles(self, base: np.ndarray) -> tuple[Triangle, ...]:
        """The triangle of each group about `base`, shape (p,)."""
        residual = self.residuals(base).high * self.scale
        return tuple(
            reduce_rows(
                self.whitened[start:stop],
                residual[start:stop],
                base,
                n=int(self.lines[g]),
                rss=float(self.spread[g]),
                log_sigma=float(self.log_sigma[g]),
            )
            for g, (start, stop) in enumerate(zip(self.starts[:-1], self.starts[1:], strict=True))
        )


def plain_rows(matrix, observed, sigma=None) -> Rows:
    """Rows of one group from ordinary arrays.

    Parameters
    ----------
    matrix : ndarray of float, shape (n, p), or Extended of that shape
    observed : ndarray of float, shape (n,)
    sigma : ndarray of float, shape (n,), optional
        1 sigma of each; 1 if not given.
    """
    matrix = matrix if isinstance(matrix, Extended) else exact(matrix)
    count = len(matrix.high)
    sigma = np.ones(count) if sigma is None else np.asarray(sigma, dtype=float)
    return Rows(
        matrix=Extended(np.ascontiguousarray(matrix.high.T), np.ascontiguousarray(matrix.low.T)),
        observed=exact(observed),
        scale=1.0 / sigma,
        starts=np.array([0, count]),
        lines=np.array([count]),
        spread=np.zeros(1),
        log_sigma=np.array([np.log(sigma).sum()]),
    )


class _Slices:
    """A matrix of shape (p, n) cut into two exact fixed-point slices and the rest."""

    def __init__(self, matrix: Extended):
        self.bits = (53 - int(np.ceil(np.log2(max(*matrix.high.shape, 2))))) // 2
        largest = np.abs(matrix.high).max(axis=1, initial=0.0)
        # Dividing by a power of two above the largest entry is exact and bounds every column by 1.
        self.exponent = np.where(largest > 0, np.frexp(largest)[1], 0)
        self.parts = _cut(
            np.ldexp(matrix.high, -self.exponent[:, None]), np.ldexp(matrix.low, -self.exponent[:, None]), self.bits
        )

    def residual(self, observed: Extended, values: np.ndarray) -> Extended:
        scaled = np.ldexp(values, self.exponent)
        exponent = int(np.frexp(np.abs(scaled).max(initial=1e-300))[1])
        pieces = np.stack(_cut(np.ldexp(scaled, -exponent), np.zeros_like(scaled), self.bits))
        first, second, third = (pieces @ part for part in self.parts)  # [i][j]: slice i of A, piece j of x
        total, error = two_sum(observed.high, -np.ldexp(first[0], exponent))
        for product in (first[1], second[0]):
            total, more = two_sum(total, -np.ldexp(product, exponent))
            error = error + more
        small = first[2] + second[1] + third[0] + second[2] + third[1]
        return two_sum(total, error + (observed.low - np.ldexp(small, exponent)))

    def gradient(self, weights: Extended) -> np.ndarray:
        """A^T u to well beyond double precision before the last rounding, shape (p,)."""
        largest = np.abs(weights.high).max(initial=0.0)
        if largest == 0.0:
            return np.zeros(len(self.exponent))
        exponent = int(np.frexp(largest)[1])
        pieces = np.stack(
            _cut(np.ldexp(weights.high, -exponent), np.ldexp(weights.low, -exponent), self.bits), axis=1
        )
        first, second, third = (part @ pieces for part in self.parts)
        total, error = two_sum(first[:, 0], first[:, 1])
        total, more = two_sum(total, second[:, 0])
        rest = first[:, 2] + second[:, 1] + third[:, 0] + second[:, 2] + third[:, 1]
        return np.ldexp(total + (error + more + rest), self.exponent + exponent)


def _cut(high: np.ndarray, low: np.ndarray, bits: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cut numbers of size up to 1 into two slices of `bits` bits each and the rest."""
    first_unit = 1.5 * 2.0 ** (52 - bits)
    second_unit = 1.5 * 2.0 ** (52 - 2 * bits)
    first = (high + first_unit) - first_unit
    rest = high - first
    second = (rest + second_unit) - second_unit
    return first, second, (rest - second) + low


def weighted(residual: Extended, scale: np.ndarray) -> Extended:
    """residual * scale^2, keeping the low part, shape (n,)."""
    once = two_product(residual.high, scale)
    once_low = once.low + residual.low * scale
    twice = two_product(once.high, scale)
    return Extended(twice.high, twice.low + once_low * scale)
