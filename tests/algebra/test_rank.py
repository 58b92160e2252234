"""Rank and condition on columns of unit norm, against the definition and numpy."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.algebra.rank import judge

seeds = st.integers(0, 2**32)


def factor(rows):
    return np.linalg.qr(rows, mode="r")


@given(seeds, st.integers(1, 6))
def test_the_condition_is_that_of_unit_columns_whatever_their_size(seed, parameters):
    rng = np.random.default_rng(seed)
    rows = rng.normal(size=(20, parameters))
    plain = judge(factor(rows))
    sized = judge(factor(rows * 10.0 ** rng.uniform(-30, 30, parameters)))
    expected = np.linalg.cond(rows / np.linalg.norm(rows, axis=0))
    assert plain.dependent == sized.dependent == ()
    assert plain.condition == pytest.approx(expected, rel=1e-10)
    assert sized.condition == pytest.approx(expected, rel=1e-8)


@given(seeds, st.integers(0, 4))
def test_a_column_that_others_make_up_is_found(seed, place):
    rng = np.random.default_rng(seed)
    rows = rng.normal(size=(30, 5)) * 10.0 ** rng.uniform(-15, 15, 5)
    rows[:, place] = rows @ np.where(
        np.arange(5) == place, 0.0, rng.uniform(0.5, 2, 5) / np.linalg.norm(rows, axis=0)
    )
    order = [i for i in range(5) if i != place] + [place]
    rank = judge(factor(rows), order)
    assert rank.dependent == (place,)
    assert rank.condition == np.inf
    assert rank.null.shape == (1, 5)
    scaled = rows / np.linalg.norm(rows, axis=0)
    assert np.linalg.norm(scaled @ rank.null[0]) < 1e-12
    # The least wanted of the columns in the null direction is the one that is named.
    assert judge(factor(rows), list(range(5))).dependent == (4,)


def test_an_empty_column_and_a_short_list_are_told(rng):
    rows = rng.normal(size=(10, 3))
    rows[:, 1] = 0
    assert judge(factor(rows)).dependent == (1,)
    short = judge(factor(rng.normal(size=(3, 5))))
    assert short.dependent == (3, 4)
    assert short.null.shape == (2, 5)


def test_a_near_singular_matrix_is_still_answered(rng):
    rows = rng.normal(size=(30, 3))
    rows[:, 2] = rows[:, 1] + 1e-10 * rows[:, 0]
    rows[:, 2] += 1e-10 * rng.normal(size=30)
    rank = judge(factor(rows))
    assert rank.dependent == ()
    assert 1e9 < rank.condition < 1e12
