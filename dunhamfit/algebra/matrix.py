"""The design matrix of many lines that share few levels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.algebra.extended import Extended, add, subtract
from dunhamfit.algebra.slices import Slices, cut, width


@dataclass(frozen=True, eq=False)
class Matrix:
    """A matrix of shape (p, n), one column of the design for each first index.

    The first q rows are differences of two columns of a table, which holds one column for
    each level; so that exact products cost p times the number of levels, not of lines. The
    other rows are each line's own.

    Attributes
    ----------
    table : Slices, shape (q, levels)
    plus, minus : ndarray of int, shape (n,)
        Columns of the table.
    own : Slices, shape (p - q, n)
    """

    table: Slices
    plus: np.ndarray
    minus: np.ndarray
    own: Slices

    @classmethod
    def of_levels(cls, table: Extended, plus: np.ndarray, minus: np.ndarray, own: np.ndarray) -> Matrix:
        """Matrix of n lines.

        Parameters
        ----------
        table : Extended, shape (q, levels)
        plus, minus : ndarray of int, shape (n,)
        own : ndarray of float, shape (p - q, n)
        """
        parameters = len(table.high) + len(own)
        # Room for as many further lines as there are parameters.
        bits = width(parameters, max(table.shape[1], len(plus)) + parameters)
        return cls(Slices.of(table, bits), plus, minus, Slices.of(Extended(own, np.zeros_like(own)), bits))

    @classmethod
    def plain(cls, matrix: Extended) -> Matrix:
        """Matrix of shape (p, n) in which lines share nothing."""
        lines = matrix.shape[1]
        nothing = np.zeros(lines, dtype=int)
        bits = width(*matrix.shape)
        return cls(Slices.of(Extended(*np.zeros((2, 0, 1))), bits), nothing, nothing, Slices.of(matrix, bits))

    @property
    def shape(self) -> tuple[int, int]:
        return len(self.table.exponent) + len(self.own.exponent), len(self.plus)

    def with_lines(self, more: np.ndarray) -> Matrix:
        """The matrix with further lines, given as floats, shape (p, more)."""
        shared, levels = self.table.shape
        count = more.shape[1]
        nothing = np.zeros((shared, 1))
        return Matrix(
            self.table.with_columns(np.concatenate([more[:shared], nothing], axis=1)),
            np.concatenate([self.plus, levels + np.arange(count)]),
            np.concatenate([self.minus, np.full(count, levels + count)]),
            self.own.with_columns(more[shared:]),
        )

    def chosen(self, rows: np.ndarray) -> Matrix:
        """The matrix that has only the given first indices, in ascending order."""
        shared = len(self.table.exponent)
        return Matrix(
            self.table.chosen(rows[rows < shared]),
            self.plus,
            self.minus,
            self.own.chosen(rows[rows >= shared] - shared),
        )

    def rounded(self, start: int, stop: int) -> np.ndarray:
        """Every entry of some lines as the nearest float or its neighbour, shape (p, stop - start)."""
        plus, minus = self.plus[start:stop], self.minus[start:stop]
        table, own = self.table.whole, self.own.whole
        entries = np.empty((self.shape[0], stop - start))
        shared, others = entries[: len(table.high)], entries[len(table.high) :]
        # Where levels nearly cancel, the first difference is exact and the second holds what it lacks.
        np.subtract(table.high.take(plus, axis=1), table.high.take(minus, axis=1), out=shared)
        shared += table.low.take(plus, axis=1) - table.low.take(minus, axis=1)
        np.add(own.high[:, start:stop], own.low[:, start:stop], out=others)
        return entries

    def transposed_product(self, values: np.ndarray) -> Extended:
        """matrix^T values to some 28 digits of its largest term, shape (n,).

        Parameters
        ----------
        values : ndarray of float, shape (p,)
        """
        shared = len(self.table.exponent)
        level = self.table.transposed_product(values[:shared])
        line = subtract(level.take(self.plus), level.take(self.minus))
        return add(line, self.own.transposed_product(values[shared:])) if len(self.own.exponent) else line

    def rough_product(self, values: np.ndarray) -> np.ndarray:
        """matrix^T values in plain float64, for steps too small to need more, shape (n,)."""
        shared = len(self.table.exponent)
        level = values[:shared] @ self.table.whole.high
        return level[self.plus] - level[self.minus] + values[shared:] @ self.own.whole.high

    def product(self, weights: Extended) -> np.ndarray:
        """matrix @ weights, summed well beyond double precision before the last rounding, shape (p,).

        Parameters
        ----------
        weights : Extended, shape (n,)
        """
        pieces, exponent = cut(weights, self.table.bits)
        levels = self.table.shape[1]
        # Sums of pieces over the lines of one level are exact: multiples of one unit, with room to add.
        by_level = np.array(
            [np.bincount(self.plus, each, levels) - np.bincount(self.minus, each, levels) for each in pieces]
        )
        return np.ldexp(np.concatenate([self.table.product(by_level), self.own.product(pieces)]), exponent)
