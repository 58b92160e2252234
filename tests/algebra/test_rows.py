"""Rows: residuals, held columns, other weights and triangles, against plain numpy and exact arithmetic."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from reference.exact_solution import as_fraction

from dunhamfit.algebra.extended import Extended
from dunhamfit.algebra.least_squares import refine
from dunhamfit.algebra.rows import Rows, plain_rows
from dunhamfit.algebra.triangle import merge, solve


def grouped_rows(rng, *, lines=60, parameters=4, edges=(0, 20, 25, 60)):
    """Rows in three groups, and the design, the observations and sigmas they stand for."""
    design = rng.normal(size=(lines, parameters)) * 10.0 ** np.arange(parameters)
    observed = design @ rng.normal(size=parameters) + rng.normal(size=lines)
    sigma = 10.0 ** rng.uniform(-1, 1, lines)
    starts = np.array(edges)
    rows = plain_rows(design, observed, sigma)
    log_sigma = np.add.reduceat(np.log(sigma), starts[:-1])
    none = np.zeros(len(starts) - 1)
    rows = replace(rows, starts=starts, lines=np.diff(starts), spread=none, log_sigma=log_sigma)
    return rows, design, observed, sigma


def answer(rows: Rows):
    triangle = rows.triangle()
    return refine(rows, triangle.r, solve(triangle))


def test_residuals_are_exact_where_positions_dwarf_them(rng):
    design = rng.normal(size=(50, 5))
    values = rng.normal(size=5) * 1e9
    observed = design @ values + rng.normal(size=50) * 1e-8
    residual = as_fraction(plain_rows(design, observed).residuals(values))
    expected = [
        Fraction(y) - sum(Fraction(a) * Fraction(x) for a, x in zip(row, values, strict=True))
        for y, row in zip(observed, design, strict=True)
    ]
    # The terms are near 1e9 and float64 keeps 1e-7 of them; here some 28 digits are kept.
    assert max(abs(a - b) for a, b in zip(residual, expected, strict=True)) < Fraction(1, 10**17)


def test_whitened_rows_are_rows_over_sigma(rng):
    rows, design, _, sigma = grouped_rows(rng)
    np.testing.assert_allclose(rows.whitened, design / sigma[:, None], rtol=4 * np.finfo(float).eps)


def test_held_columns_equal_elimination(rng):
    """Fixing a parameter is to take its column, times its value, from the observations."""
    rows, design, observed, sigma = grouped_rows(rng)
    held = answer(rows.held([1, 3], [0.7, -2e-3]))
    moved = observed - design[:, [1, 3]] @ np.array([0.7, -2e-3])
    expected = np.linalg.lstsq(design[:, [0, 2]] / sigma[:, None], moved / sigma, rcond=None)[0]
    np.testing.assert_allclose(held.values, expected, rtol=1e-10)


def test_weight_is_repetition(rng):
    """A line given three times is one line with sigma / sqrt(3)."""
    design, observed = rng.normal(size=(20, 3)), rng.normal(size=20)
    sigma = rng.uniform(0.5, 2, 20)
    thrice = answer(plain_rows(np.repeat(design, 3, axis=0), np.repeat(observed, 3), np.repeat(sigma, 3)))
    once = answer(plain_rows(design, observed, sigma / np.sqrt(3)))
    np.testing.assert_allclose(thrice.values, once.values, rtol=1e-13)
    np.testing.assert_allclose(np.abs(np.diag(thrice.r)), np.abs(np.diag(once.r)), rtol=1e-13)
    assert thrice.chi2 == pytest.approx(once.chi2, rel=1e-13)


def test_merged_triangles_equal_one_reduction(rng):
    rows, design, observed, sigma = grouped_rows(rng)
    base = rng.normal(size=4)
    groups = rows.triangles(base)
    whole = merge(groups)
    assert [item.n for item in groups] == [20, 5, 35]
    white, target = design / sigma[:, None], (observed - design @ base) / sigma
    one = np.linalg.qr(np.column_stack([white, target]), mode="r")
    np.testing.assert_allclose(
        np.abs(whole.r), np.abs(one[:4, :4]), rtol=1e-10, atol=1e-12 * np.abs(one).max()
    )
    assert whole.rss == pytest.approx(one[4, 4] ** 2, rel=1e-12)
    expected = np.linalg.lstsq(white, target, rcond=None)[0] + base
    np.testing.assert_allclose(solve(whole), expected, rtol=1e-11, atol=1e-12 * np.abs(expected).max())
    assert whole.log_sigma == pytest.approx(np.log(sigma).sum())


def test_a_triangle_stands_for_its_rows(rng):
    rows, design, observed, sigma = grouped_rows(rng)
    for triangle, (start, stop) in zip(
        rows.triangles(np.zeros(4)), ((0, 20), (20, 25), (25, 60)), strict=True
    ):
        for _ in range(3):
            c = rng.normal(size=4)
            direct = np.sum(((observed - design @ c) / sigma)[start:stop] ** 2)
            assert triangle.chi2(c) == pytest.approx(direct, rel=1e-11)


def test_other_factors_reach_every_sigma_of_their_group(rng):
    rows, design, observed, sigma = grouped_rows(rng)
    factors = np.array([2.0, 0.5, 3.0])
    each = np.repeat(factors, [20, 5, 35])
    rescaled = rows.reweighted(factors)
    direct = plain_rows(design, observed, sigma * each)
    np.testing.assert_allclose(answer(rescaled).values, answer(direct).values, rtol=1e-12)
    assert answer(rescaled).chi2 == pytest.approx(answer(direct).chi2, rel=1e-12)
    assert rescaled.log_sigma.sum() == pytest.approx(np.log(sigma * each).sum())


def test_the_low_part_of_an_observation_counts():
    rows = plain_rows(np.ones((2, 1)), Extended(np.array([1e10, 1e10]), np.array([1e-7, 3e-7])))
    # 1e10 in float64 ends at 2e-6.
    np.testing.assert_allclose(rows.residuals(np.array([1e10])).high, [1e-7, 3e-7], rtol=1e-12)
