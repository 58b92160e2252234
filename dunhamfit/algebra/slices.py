"""Matrices cut into fixed-point slices, so that products with them can be had to twice the precision.

Each column of the design is cut into slices so narrow that products and sums of two slices
are exact in float64, which leaves the work to matrix multiplication (K. Ozaki, T. Ogita,
S. Oishi and S. M. Rump, Numer. Algorithms 59, 95 (2012)). Differences of slices are exact
too: columns of lines are cut once for each level and then subtracted.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.algebra.extended import Extended, two_sum


@dataclass(frozen=True, eq=False)
class Slices:
    """A matrix of shape (p, n), entry (i, j) = 2^exponent_i (first + second + rest)_ij.

    Attributes
    ----------
    first, second, rest : ndarray of float, shape (p, n)
        Multiples of 2^-bits, multiples of 4^-bits, and what is left.
    exponent : ndarray of int, shape (p,)
    bits : int
        Width of a slice.
    """

    first: np.ndarray
    second: np.ndarray
    rest: np.ndarray
    exponent: np.ndarray
    bits: int

    @property
    def shape(self) -> tuple[int, int]:
        return self.first.shape

    @property
    def parts(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        return self.first, self.second, self.rest

    @classmethod
    def of(cls, matrix: Extended, longest: int = 0) -> Slices:
        """Slices of a matrix.

        Parameters
        ----------
        matrix : Extended, shape (p, n)
        longest : int
            Number of columns n that the matrix may have after `difference`, if more than now.
        """
        # Entries up to 2 in size, from a difference, times slices up to 1, summed over p or n: exact below 2^53.
        bits = (52 - int(np.ceil(np.log2(max(*matrix.shape, longest, 2))))) // 2
        largest = np.maximum(matrix.high.max(axis=1, initial=0.0), -matrix.high.min(axis=1, initial=0.0))
        exponent = np.where(largest > 0, np.frexp(largest)[1], 0)
        shrink = np.ldexp(1.0, -exponent)[:, None]  # a power of two, so that scaling is exact
        return cls(*_cut(matrix.high * shrink, matrix.low * shrink, bits), exponent, bits)

    def difference(self, plus: np.ndarray, minus: np.ndarray) -> Slices:
        """Columns `plus` less columns `minus`, shape (p, len(plus))."""
        parts = (part.take(plus, axis=1) - part.take(minus, axis=1) for part in self.parts)
        return Slices(*parts, self.exponent, self.bits)

    def and_columns(self, more: np.ndarray) -> Slices:
        """The matrix with further columns, given as floats, shape (p, m)."""
        shrunk = more * np.ldexp(1.0, -self.exponent)[:, None]
        extra = _cut(shrunk, np.zeros_like(shrunk), self.bits)
        parts = (np.concatenate(pair, axis=1) for pair in zip(self.parts, extra, strict=True))
        return Slices(*parts, self.exponent, self.bits)

    def chosen(self, rows: np.ndarray) -> Slices:
        """The matrix that has only the given first indices."""
        return Slices(*(part[rows] for part in self.parts), self.exponent[rows], self.bits)

    @property
    def rounded(self) -> np.ndarray:
        """Every entry as the nearest float or its neighbour, shape (p, n)."""
        return np.ldexp(1.0, self.exponent)[:, None] * (self.first + (self.second + self.rest))

    def less_product(self, observed: Extended, values: np.ndarray) -> Extended:
        """observed - matrix^T values to some 28 digits of its largest term, shape (n,).

        Parameters
        ----------
        observed : Extended, shape (n,)
        values : ndarray of float, shape (p,)
        """
        scaled = np.ldexp(values, self.exponent)
        exponent = int(np.frexp(np.abs(scaled).max(initial=1e-300))[1])
        pieces = np.stack(_cut(np.ldexp(scaled, -exponent), np.zeros_like(scaled), self.bits))
        first, second, third = (pieces @ part for part in self.parts)
        total, error = two_sum(observed.high, -np.ldexp(first[0], exponent))
        for product in (first[1], second[0]):
            total, more = two_sum(total, -np.ldexp(product, exponent))
            error = error + more
        small = first[2] + second[1] + third[0] + second[2] + third[1]
        return two_sum(total, error + (observed.low - np.ldexp(small, exponent)))

    def product_with(self, weights: Extended) -> np.ndarray:
        """matrix @ weights, the sums kept well beyond double precision before the last rounding, shape (p,).

        Parameters
        ----------
        weights : Extended, shape (n,)
        """
        largest = np.abs(weights.high).max(initial=0.0)
        if largest == 0.0:
            return np.zeros(len(self.exponent))
        exponent = int(np.frexp(largest)[1])
        pieces = np.stack(_cut(np.ldexp(weights.high, -exponent), np.ldexp(weights.low, -exponent), self.bits), axis=1)
        first, second, third = (part @ pieces for part in self.parts)
        total, error = two_sum(first[:, 0], first[:, 1])
        total, more = two_sum(total, second[:, 0])
        rest = first[:, 2] + second[:, 1] + third[:, 0] + second[:, 2] + third[:, 1]
        return np.ldexp(total + (error + more + rest), self.exponent + exponent)


def beside(upper: Slices, lower: Slices) -> Slices:
    """One matrix with the first indices of both, shape (p + q, n); both must have slices of one width."""
    parts = (np.concatenate(pair) for pair in zip(upper.parts, lower.parts, strict=True))
    return Slices(*parts, np.concatenate([upper.exponent, lower.exponent]), upper.bits)


def _cut(high: np.ndarray, low: np.ndarray, bits: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cut numbers of size up to 1 into two slices of `bits` bits each and the rest."""
    first_unit = 1.5 * 2.0 ** (52 - bits)
    second_unit = 1.5 * 2.0 ** (52 - 2 * bits)
    first = (high + first_unit) - first_unit
    rest = high - first
    second = (rest + second_unit) - second_unit
    return first, second, (rest - second) + low
