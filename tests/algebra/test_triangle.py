"""Triangles against plain numpy: reduction in blocks, shifts, scalings, merging."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.algebra.triangle import block_edges, covariance_factor, merge, reduce_rows, solve

seeds = st.integers(0, 2**32)


def random_rows(rng, lines, parameters):
    return rng.normal(size=(lines, parameters)), rng.normal(size=lines)


@given(seeds, st.integers(1, 40), st.integers(1, 8), st.integers(1, 39))
def test_merging_parts_equals_reducing_the_whole(seed, lines, parameters, cut):
    rng = np.random.default_rng(seed)
    rows, residual = random_rows(rng, lines, parameters)
    base = rng.normal(size=parameters)
    cut = min(cut, lines)
    parts = [
        reduce_rows(rows[piece], residual[piece], base, n=len(residual[piece]), log_sigma=0.5)
        for piece in (slice(0, cut), slice(cut, None))
        if len(residual[piece])
    ]
    whole, merged = reduce_rows(rows, residual, base, n=lines), merge(parts)
    assert merged.n == whole.n == lines
    assert merged.log_sigma == 0.5 * len(parts)
    # R is unique only up to the sign of its rows: compare what it stands for.
    np.testing.assert_allclose(merged.r.T @ merged.r, whole.r.T @ whole.r, atol=1e-11)
    for _ in range(3):
        c = rng.normal(size=parameters)
        assert merged.chi2(c) == pytest.approx(whole.chi2(c), rel=1e-10, abs=1e-10)


@pytest.mark.parametrize(
    ("lines", "parameters"), [(5, 3), (500, 3), (5000, 12), (1344, 24), (700, 60), (40, 50)]
)
def test_reduction_in_blocks_equals_one_factorisation(lines, parameters, rng):
    rows, residual = random_rows(rng, lines, parameters)
    triangle = reduce_rows(rows, residual, np.zeros(parameters), n=lines, rss=1.5)
    expected = np.linalg.qr(np.column_stack([rows, residual]), mode="r")
    height = min(lines, parameters)
    sign = np.sign(np.diag(triangle.r) * np.diag(expected[:height, :height]))
    np.testing.assert_allclose(sign[:, None] * triangle.r, expected[:height, :parameters], atol=1e-10)
    np.testing.assert_allclose(sign * triangle.z, expected[:height, parameters], atol=1e-10)
    beyond = float(expected[parameters, parameters] ** 2) if lines > parameters else 0.0
    assert triangle.rss == pytest.approx(1.5 + beyond)


@given(st.integers(0, 10**6), st.integers(0, 10**5), st.integers(1, 200))
def test_blocks_cover_every_row_once(start, count, parameters):
    edges = block_edges(start, start + count, parameters)
    assert (edges[0], edges[-1]) == (start, start + count)
    assert edges == sorted(edges)


@given(seeds, st.floats(0.1, 10))
def test_a_factor_scales_every_sigma(seed, factor):
    rng = np.random.default_rng(seed)
    rows, residual = random_rows(rng, 20, 4)
    base = np.zeros(4)
    scaled = reduce_rows(rows, residual, base, n=20).scaled(factor)
    direct = reduce_rows(rows / factor, residual / factor, base, n=20)
    c = rng.normal(size=4)
    assert scaled.chi2(c) == pytest.approx(direct.chi2(c), rel=1e-12)
    assert scaled.log_sigma == pytest.approx(20 * np.log(factor))


@given(seeds)
def test_a_shift_of_the_base_changes_nothing(seed):
    rng = np.random.default_rng(seed)
    rows, residual = random_rows(rng, 20, 4)
    triangle = reduce_rows(rows, residual, rng.normal(size=4), n=20)
    moved = triangle.shifted(rng.normal(size=4))
    c = rng.normal(size=4)
    assert moved.chi2(c) == pytest.approx(triangle.chi2(c), rel=1e-11)
    np.testing.assert_allclose(solve(moved), solve(triangle), atol=1e-11)


def test_chosen_columns_fix_the_others_at_the_base(rng):
    rows, residual = random_rows(rng, 30, 5)
    base = rng.normal(size=5)
    part = reduce_rows(rows, residual, base, n=30).chosen([0, 3])
    expected = np.linalg.lstsq(rows[:, [0, 3]], residual, rcond=None)[0] + base[[0, 3]]
    np.testing.assert_allclose(solve(part), expected, rtol=1e-11)


def test_the_covariance_is_the_inverse_of_the_normal_matrix(rng):
    rows, residual = random_rows(rng, 30, 5)
    r = reduce_rows(rows, residual, np.zeros(5), n=30).r
    factor = covariance_factor(r)
    np.testing.assert_allclose(factor @ factor.T, np.linalg.inv(rows.T @ rows), rtol=1e-10, atol=1e-14)
    assert np.all(np.tril(factor, -1) == 0)
