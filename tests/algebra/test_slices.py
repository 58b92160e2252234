"""Products with slices and with the design matrix, against exact rational arithmetic (`fractions`)."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from reference.exact_solution import as_fraction

from dunhamfit.algebra.extended import Extended
from dunhamfit.algebra.matrix import Matrix
from dunhamfit.algebra.slices import Slices, cut, width

# A product is right to some 2^-93 of its largest terms (28 digits), summed over a few of them.
ROUNDING = Fraction(1, 2**85)


def random_pairs(rng, shape, spread: float) -> Extended:
    """Numbers of very different size from row to row, with low parts that matter."""
    size = 10.0 ** rng.uniform(-spread, spread, shape[0])[:, None] if spread else 1.0
    high = rng.normal(size=shape) * size
    return Extended(high, high * rng.uniform(-0.5, 0.5, shape) * 2.0**-53)


def exact_matrix(table: Extended, plus, minus, own) -> np.ndarray:
    whole = as_fraction(table)
    shared = whole[:, plus] - whole[:, minus]
    return np.concatenate([shared, as_fraction(Extended(own, np.zeros_like(own)))])


def random_matrix(rng, *, terms=4, levels=7, lines=30, own_rows=2) -> tuple[Matrix, np.ndarray]:
    table = random_pairs(rng, (terms, levels), 6)
    plus, minus = rng.integers(0, levels, (2, lines))
    own = rng.normal(size=(own_rows, lines)) * 10.0 ** rng.uniform(-3, 3, (own_rows, 1))
    return Matrix.of_levels(table, plus, minus, own), exact_matrix(table, plus, minus, own)


@given(st.integers(0, 2**32), st.integers(1, 60))
def test_slices_hold_the_whole_number(seed, count):
    rng = np.random.default_rng(seed)
    matrix = random_pairs(rng, (3, count), 20)
    slices = Slices.of(matrix, width(3, count))
    whole = sum(as_fraction(Extended(part, np.zeros_like(part))) for part in slices.parts)
    whole = whole * np.array([Fraction(2) ** int(e) for e in slices.exponent], dtype=object)[:, None]
    exact = as_fraction(matrix)
    largest = np.abs(exact).max(axis=1)[:, None]
    assert np.all(np.abs(whole - exact) <= ROUNDING * largest)
    # The first two are multiples of one unit each, which is what makes their products exact.
    for part, unit in ((slices.first, 2.0**-slices.bits), (slices.second, 4.0**-slices.bits)):
        assert np.all(part / unit == np.rint(part / unit))


@given(st.integers(0, 2**32), st.integers(1, 60), st.floats(0, 12))
def test_pieces_add_up_to_the_vector(seed, count, spread):
    rng = np.random.default_rng(seed)
    weights = random_pairs(rng, (count, 1), spread)
    weights = Extended(weights.high[:, 0], weights.low[:, 0])
    pieces, exponent = cut(weights, width(3, count))
    total = (
        sum(as_fraction(Extended(piece, np.zeros_like(piece))) for piece in pieces) * Fraction(2) ** exponent
    )
    exact = as_fraction(weights)
    assert np.all(np.abs(total - exact) <= ROUNDING * np.abs(exact).max())


@pytest.mark.parametrize("own_rows", [0, 2])
def test_products_with_a_vector_of_parameters(own_rows, rng):
    matrix, exact = random_matrix(rng, own_rows=own_rows)
    values = rng.normal(size=len(exact)) * 10.0 ** rng.uniform(-6, 6, len(exact))
    terms = exact.T * np.array([Fraction(x) for x in values], dtype=object)
    found = as_fraction(matrix.transposed_product(values))
    level = np.abs(terms).max() * 4  # a difference of levels is as good as the levels
    assert np.all(np.abs(found - terms.sum(axis=1)) <= ROUNDING * level)


@pytest.mark.parametrize("own_rows", [0, 2])
def test_products_with_a_vector_of_lines_cancel_without_loss(own_rows, rng):
    """The gradient at the solution is zero: a plain float product has no correct digit there."""
    matrix, exact = random_matrix(rng, own_rows=own_rows)
    weights = rng.normal(size=exact.shape[1])
    # Make the first column orthogonal to the weights to within rounding, as residuals are.
    column = np.array([float(x) for x in exact[0]])
    weights -= column * (weights @ column) / (column @ column)
    weights_exact = np.array([Fraction(x) for x in weights], dtype=object)
    expected = exact @ weights_exact
    found = matrix.product(Extended(weights, np.zeros_like(weights)))
    size = (np.abs(exact) * np.abs(weights_exact)).sum(axis=1)
    error = np.array([float(abs(Fraction(f) - e) / s) for f, e, s in zip(found, expected, size, strict=True)])
    relative = np.array([float(abs(Fraction(f) - e) / abs(e)) for f, e in zip(found, expected, strict=True)])
    # Right to the last place of the result, or to 2^-85 of the terms where they cancel altogether.
    assert np.all((error < 2.0**-85) | (relative < 2.0**-52))


def test_entries_round_to_the_nearest_float(rng):
    matrix, exact = random_matrix(rng, lines=200)
    rounded = matrix.rounded(0, 200)
    nearest = np.array([[float(x) for x in row] for row in exact])
    # Differences that cancel are as good as the levels; the others are the nearest float or its neighbour.
    largest = np.abs(nearest).max(axis=1, keepdims=True)
    assert np.all(np.abs(rounded - nearest) <= 2 * np.spacing(np.abs(nearest)) + 2.0**-85 * largest)
    np.testing.assert_array_equal(matrix.rounded(50, 60), rounded[:, 50:60])


def test_chosen_columns_and_further_lines(rng):
    matrix, exact = random_matrix(rng)
    parameters, lines = exact.shape
    chosen = np.array([0, 2, 3, 5])
    assert matrix.chosen(chosen).shape == (4, lines)
    np.testing.assert_array_equal(matrix.chosen(chosen).rounded(0, lines), matrix.rounded(0, lines)[chosen])
    more = np.eye(parameters)[:, [1, 5]]
    longer = matrix.with_lines(more)
    assert longer.shape == (parameters, lines + 2)
    np.testing.assert_array_equal(longer.rounded(lines, lines + 2), more)
    values = rng.normal(size=parameters)
    total = longer.transposed_product(values)
    np.testing.assert_array_equal(total.high[lines:], values[[1, 5]])
    np.testing.assert_array_equal(total.high[:lines], matrix.transposed_product(values).high)


def test_a_matrix_without_levels_is_its_own_rows(rng):
    pairs = random_pairs(rng, (3, 20), 3)
    matrix = Matrix.plain(pairs)
    assert matrix.shape == (3, 20)
    np.testing.assert_array_equal(matrix.rounded(0, 20), pairs.high)
    values = rng.normal(size=3)
    found = as_fraction(matrix.transposed_product(values))
    expected = as_fraction(pairs).T @ np.array([Fraction(x) for x in values], dtype=object)
    scale = (np.abs(as_fraction(pairs)).T * np.array([Fraction(abs(x)) for x in values], dtype=object)).max()
    assert np.all(np.abs(found - expected) <= ROUNDING * scale)


@given(st.integers(1, 10**7), st.integers(1, 10**4))
def test_slices_are_narrow_enough_for_exact_sums(lines, parameters):
    bits = width(parameters, lines)
    # Entries up to 2 and slices up to 1 in units of 2^-bits each, summed over the longer side.
    assert 2 * max(lines, parameters) * 4**bits <= 2**53
