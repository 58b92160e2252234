"""Matrices cut into fixed-point slices, so that products with them can be had to twice the precision.

Each row of the matrix is cut into slices so narrow that products and sums of two slices
are exact in float64, which leaves the work to matrix multiplication (K. Ozaki, T. Ogita,
S. Oishi and S. M. Rump, Numer. Algorithms 59, 95 (2012)).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.algebra.extended import Extended, exact, two_sum


@dataclass(frozen=True, eq=False)
class Slices:
    """A matrix of shape (p, m), entry (i, j) = 2^exponent_i (first + second + rest)_ij.

    Attributes
    ----------
    whole : Extended, shape (p, m)
        The matrix as it was given.
    first, second, rest : ndarray of float, shape (p, m)
        Multiples of 2^-bits, multiples of 4^-bits, and what is left.
    exponent : ndarray of int, shape (p,)
    bits : int
        Width of a slice.
    """

    whole: Extended
    first: np.ndarray
    second: np.ndarray
    rest: np.ndarray
    exponent: np.ndarray
    bits: int

    @classmethod
    def of(cls, matrix: Extended, bits: int) -> Slices:
        """Slices of a matrix, shape (p, m); see `width` for `bits`."""
        largest = np.maximum(matrix.high.max(axis=1, initial=0.0), -matrix.high.min(axis=1, initial=0.0))
        exponent = np.where(largest > 0, np.frexp(largest)[1], 0)
        shrink = np.ldexp(1.0, -exponent)[:, None]  # a power of two, so that scaling is exact
        return cls(matrix, *_cut(matrix.high * shrink, matrix.low * shrink, bits), exponent, bits)

    @property
    def shape(self) -> tuple[int, int]:
        return self.first.shape

    @property
    def parts(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        return self.first, self.second, self.rest

    def with_columns(self, more: np.ndarray) -> Slices:
        """The matrix with further columns, given as floats, shape (p, more)."""
        shrunk = more * np.ldexp(1.0, -self.exponent)[:, None]
        extra = more, np.zeros_like(more), *_cut(shrunk, np.zeros_like(more), self.bits)
        high, low, *parts = (
            np.concatenate(pair, axis=1) for pair in zip((*self.whole, *self.parts), extra, strict=True)
        )
        return Slices(Extended(high, low), *parts, self.exponent, self.bits)

    def chosen(self, rows: np.ndarray) -> Slices:
        """The matrix that has only the given first indices."""
        whole = self.whole.take(rows, axis=0)
        return Slices(whole, *(part[rows] for part in self.parts), self.exponent[rows], self.bits)

    def transposed_product(self, values: np.ndarray) -> Extended:
        """matrix^T values to some 28 digits of its largest term, shape (m,).

        Parameters
        ----------
        values : ndarray of float, shape (p,)
        """
        pieces, exponent = cut(exact(np.ldexp(values, self.exponent)), self.bits)
        first, second, third = (pieces @ part for part in self.parts)
        total, error = two_sum(first[0], first[1])
        total, more = two_sum(total, second[0])
        small = first[2] + second[1] + third[0] + second[2] + third[1]
        scale = 2.0**exponent
        total, error = two_sum(total, error + more + small)
        return Extended(scale * total, scale * error)

    def product(self, pieces: np.ndarray) -> np.ndarray:
        """matrix @ weights, summed well beyond double precision before the last rounding, shape (p,).

        Parameters
        ----------
        pieces : ndarray of float, shape (3, m)
            Of the weights, from `cut`; sums of pieces will do.
        """
        first, second, third = (part @ pieces.T for part in self.parts)
        total, error = two_sum(first[:, 0], first[:, 1])
        total, more = two_sum(total, second[:, 0])
        small = first[:, 2] + second[:, 1] + third[:, 0] + second[:, 2] + third[:, 1]
        return np.ldexp(total + (error + more + small), self.exponent)


def width(parameters: int, lines: int) -> int:
    """Bits of a slice such that sums of that many products of differences of slices stay below 2^53."""
    return (52 - int(max(parameters, lines, 2) - 1).bit_length()) // 2


def cut(weights: Extended, bits: int) -> tuple[np.ndarray, int]:
    """Three pieces of a vector and an exponent: weights = 2^exponent * (sum of the pieces).

    Parameters
    ----------
    weights : Extended, shape (n,)

    Returns
    -------
    pieces : ndarray of float, shape (3, n)
    exponent : int
    """
    exponent = int(np.frexp(np.abs(weights.high).max(initial=0.0))[1])
    shrink = 2.0**-exponent
    return np.array(_cut(weights.high * shrink, weights.low * shrink, bits)), exponent


def _cut(high: np.ndarray, low: np.ndarray, bits: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cut numbers of size up to 1 into two slices of `bits` bits each and the rest."""
    first_unit = 1.5 * 2.0 ** (52 - bits)
    second_unit = 1.5 * 2.0 ** (52 - 2 * bits)
    first = high + first_unit
    first -= first_unit
    rest = high - first
    second = rest + second_unit
    second -= second_unit
    rest -= second
    rest += low
    return first, second, rest
