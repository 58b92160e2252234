"""Extended numbers against exact rational arithmetic (the standard library's `fractions`)."""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.algebra import extended
from dunhamfit.algebra.extended import Extended

# Far from overflow and from the subnormal numbers, where the error of a product is itself not a float.
numbers = st.floats(min_value=-1e60, max_value=1e60, allow_subnormal=False).filter(
    lambda x: x == 0 or abs(x) > 1e-60
)
# Roundings of one operation on pairs: 2^-104 is four units of the last place of 106 bits.
ROUNDING = Fraction(1, 2**100)


def pair(high: float, low: float) -> Extended:
    """A normalised pair of length one."""
    return extended.two_sum(np.array([high]), np.array([low * 2.0**-54]))


pairs = st.builds(pair, numbers, numbers)


def exactly(value: Extended, index: int = 0) -> Fraction:
    return Fraction(float(value.high[index])) + Fraction(float(value.low[index]))


@given(numbers, numbers)
def test_a_sum_of_two_floats_is_exact(a, b):
    total = extended.two_sum(np.array([a]), np.array([b]))
    assert exactly(total) == Fraction(a) + Fraction(b)
    assert total.high[0] == a + b


@given(numbers, numbers)
def test_a_product_of_two_floats_is_exact(a, b):
    product = extended.two_product(np.array([a]), np.array([b]))
    assert exactly(product) == Fraction(a) * Fraction(b)
    assert product.high[0] == a * b


@given(pairs, pairs)
def test_sums_of_pairs_lose_nothing_beyond_the_last_place_of_the_larger(a, b):
    larger = abs(exactly(a)) + abs(exactly(b))
    assert abs(exactly(extended.add(a, b)) - (exactly(a) + exactly(b))) <= ROUNDING * larger
    assert abs(exactly(extended.subtract(a, b)) - (exactly(a) - exactly(b))) <= ROUNDING * larger


@given(pairs, pairs)
def test_products_of_pairs_are_right_to_the_last_place(a, b):
    expected = exactly(a) * exactly(b)
    assert abs(exactly(extended.multiply(a, b)) - expected) <= ROUNDING * abs(expected)


@given(st.integers(min_value=0, max_value=600), st.integers(min_value=0, max_value=9))
def test_powers_of_quantum_numbers_are_exact_to_106_bits(j, highest):
    table = extended.powers(extended.exact(np.array([j * (j + 1.0)])), highest)
    assert table.high.shape == (highest + 1, 1)
    for power in range(highest + 1):
        expected = Fraction(j * (j + 1)) ** power
        found = Fraction(float(table.high[power, 0])) + Fraction(float(table.low[power, 0]))
        assert abs(found - expected) <= ROUNDING * expected
        if expected < 2**53:
            assert found == expected


@given(st.decimals(min_value=Decimal("-1e30"), max_value=Decimal("1e30"), places=12))
def test_decimals_keep_32_digits(value):
    made = extended.from_decimal(value)
    exact = Fraction(value)
    assert abs(Fraction(float(made.high)) + Fraction(float(made.low)) - exact) <= ROUNDING * abs(exact)
