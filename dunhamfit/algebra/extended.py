"""Numbers carried as an unevaluated sum of two floats, some 32 decimal digits.

A pair (high, low) stands for high + low exactly, with |low| at most half a unit in the
last place of high. Only additions and multiplications of float64 arrays are used, so
results are the same on every machine with IEEE 754 arithmetic; numpy's longdouble is
no wider than float64 on several of them. The error-free sum is Knuth's, the product
Dekker's (T. J. Dekker, Numer. Math. 18, 224 (1971)); the sum of many products is that
of T. Ogita, S. M. Rump and S. Oishi, SIAM J. Sci. Comput. 26, 1955 (2005).
"""

from __future__ import annotations

from decimal import Decimal
from typing import NamedTuple

import numpy as np

_SPLITTER = 134217729.0  # 2^27 + 1: cuts a 53-bit significand into two halves


class Extended(NamedTuple):
    """high + low, two float64 arrays of one shape."""

    high: np.ndarray
    low: np.ndarray

    @property
    def shape(self) -> tuple[int, ...]:
        return self.high.shape

    @property
    def T(self) -> Extended:
        return Extended(self.high.T, self.low.T)

    def take(self, index, axis: int = -1) -> Extended:
        """The entries that `index` picks along `axis`."""
        return Extended(np.take(self.high, index, axis), np.take(self.low, index, axis))


def exact(value) -> Extended:
    """An array of floats (or integers below 2^53), with nothing in the low part."""
    high = np.asarray(value, dtype=float)
    return Extended(high, np.zeros_like(high))


def from_decimal(value: Decimal) -> Extended:
    """One decimal number, to the 32 digits that a pair holds."""
    high = float(value)
    return Extended(np.float64(high), np.float64(float(value - Decimal(high))))


def two_sum(a, b) -> Extended:
    """a + b without error, for any floats."""
    total = a + b
    other = total - a
    return Extended(total, (a - (total - other)) + (b - other))


def _fast_two_sum(a, b) -> Extended:
    """a + b without error where |a| >= |b|."""
    total = a + b
    return Extended(total, b - (total - a))


def _halves(a):
    upper = _SPLITTER * a
    upper -= upper - a
    return upper, a - upper


def two_product(a, b) -> Extended:
    """a * b without error, for floats below 2^996 in size."""
    product = a * b
    a_upper, a_lower = _halves(a)
    b_upper, b_lower = _halves(b)
    error = a_upper * b_upper
    error -= product
    error += a_upper * b_lower
    error += a_lower * b_upper
    error += a_lower * b_lower
    return Extended(product, error)


def add(a: Extended, b: Extended) -> Extended:
    """a + b; error about 2^-104 of |a| + |b|, as that of its operands."""
    total, error = two_sum(a.high, b.high)
    return _fast_two_sum(total, error + (a.low + b.low))


def subtract(a: Extended, b: Extended) -> Extended:
    """a - b; error as that of `add`."""
    total, error = two_sum(a.high, -b.high)
    return _fast_two_sum(total, error + (a.low - b.low))


def multiply(a: Extended, b: Extended) -> Extended:
    """a * b; relative error about 2^-102."""
    product, error = two_product(a.high, b.high)
    error += a.high * b.low
    error += a.low * b.high
    return _fast_two_sum(product, error)


def powers(base: Extended, highest: int) -> Extended:
    """base^0 ... base^highest, shape (highest + 1, ...)."""
    table = exact(np.stack([np.ones_like(base.high), base.high]))
    table.low[1] = base.low
    while len(table.high) <= highest:  # each round doubles the highest power
        more = multiply(Extended(table.high[1:], table.low[1:]), Extended(table.high[-1], table.low[-1]))
        table = Extended(np.concatenate([table.high, more.high]), np.concatenate([table.low, more.low]))
    return Extended(table.high[: highest + 1], table.low[: highest + 1])
