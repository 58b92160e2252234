"""Leaving groups out, against fits of the remaining rows by numpy."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dunhamfit.algebra.leave_out import leave_out
from dunhamfit.algebra.triangle import reduce_rows

# Well-conditioned rows of a few dozen entries: rounding is some 1e-14, and digits are lost where a group is nearly
# alone in telling a parameter.
RTOL = 1e-8


def make(rng, sizes, parameters):
    rows = [rng.normal(size=(n, parameters)) for n in sizes]
    observed = [rng.normal(size=n) for n in sizes]
    return rows, observed


def triangles(rows, observed, base):
    return [reduce_rows(a, y - a @ base, base, n=len(y)) for a, y in zip(rows, observed, strict=True)]


def refit(rows, observed, without):
    a = np.concatenate([item for g, item in enumerate(rows) if g != without])
    y = np.concatenate([item for g, item in enumerate(observed) if g != without])
    values = np.linalg.lstsq(a, y)[0]
    factor = np.linalg.qr(a)[1]
    return values, np.linalg.inv(factor.T @ factor)


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    sizes=st.lists(st.integers(1, 9), min_size=3, max_size=7),
    parameters=st.integers(1, 4),
)
def test_every_group_left_out_is_a_fit_of_the_others(seed, sizes, parameters):
    """The first group is large enough to hold the fit up by itself; the second one holds it up without the first."""
    rng = np.random.default_rng(seed)
    sizes = [15, 15, *sizes]
    rows, observed = make(rng, sizes, parameters)
    base = rng.normal(size=parameters)
    found = leave_out(triangles(rows, observed, base), range(len(sizes)))
    everything = np.linalg.qr(np.concatenate(rows))[1]
    covariance = np.linalg.inv(everything.T @ everything)
    for g, (a, y) in enumerate(zip(rows, observed, strict=True)):
        values, others = refit(rows, observed, g)
        np.testing.assert_allclose(found.values[g], values, rtol=RTOL, atol=RTOL)
        error = y - a @ values
        np.testing.assert_allclose(found.chi2_predicted[g], error @ error, rtol=RTOL)
        # Dense covariance of the prediction: noise of the lines and of the constants without them.
        predictive = np.eye(len(y)) + a @ others @ a.T
        np.testing.assert_allclose(found.chi2_predictive[g], error @ np.linalg.solve(predictive, error), rtol=RTOL)
        np.testing.assert_allclose(found.shift_sigmas[g] ** 2, np.diag(others - covariance), rtol=1e-6, atol=1e-12)
    assert found.determined.all()
    assert list(found.n) == list(found.dof) == sizes


def test_single_rows_give_the_press_residuals(rng):
    """e_i / (1 - h_i): D. M. Allen, Technometrics 16, 125 (1974)."""
    (a,), (y,) = make(rng, [12], 3)
    q = np.linalg.qr(a)[0]
    residual = y - q @ (q.T @ y)
    leverage = (q**2).sum(axis=1)
    rows = [a[i : i + 1] for i in range(12)]
    found = leave_out(triangles(rows, [y[i : i + 1] for i in range(12)], np.zeros(3)), range(12))
    np.testing.assert_allclose(found.chi2_predicted, (residual / (1 - leverage)) ** 2, rtol=1e-10)


def test_groups_of_several_triangles_and_rows_that_always_stay(rng):
    rows, observed = make(rng, [6, 6, 6, 6, 4], 3)
    found = leave_out(triangles(rows, observed, np.zeros(3)), [0, 1, 0, 1, -1])
    a = np.concatenate([rows[1], rows[3], rows[4]])
    y = np.concatenate([observed[1], observed[3], observed[4]])
    np.testing.assert_allclose(found.values[0], np.linalg.lstsq(a, y)[0], rtol=RTOL)
    assert list(found.n) == [12, 12]


@pytest.mark.parametrize("weak", [1e-2, 1e-4, 1e-6])
def test_a_group_nearly_alone_in_telling_a_parameter(rng, weak):
    """Where the identity would lose digits the remaining rows are merged: still a fit of the others."""
    rows, observed = make(rng, [10, 10, 10], 3)
    for g in (1, 2):
        rows[g][:, 2] *= weak
    found = leave_out(triangles(rows, observed, np.zeros(3)), range(3))
    values, others = refit(rows, observed, 0)
    sigma = np.sqrt(np.diag(others))
    assert np.all(np.abs(found.values[0] - values) < 1e-8 * sigma)
    np.testing.assert_allclose(found.shift_sigmas[0][2], sigma[2], rtol=2 * weak**2 + 1e-8)
    assert found.determined.all()


def test_a_group_alone_in_telling_a_parameter_is_said_not_guessed(rng):
    rows, observed = make(rng, [10, 10, 10], 3)
    for g in (1, 2):
        rows[g][:, 2] = 0.0
    found = leave_out(triangles(rows, observed, np.zeros(3)), range(3))
    assert list(found.determined) == [False, True, True]
    assert found.lost == ((2,), (), ())
    assert np.isinf(found.chi2_predicted[0]) and np.isinf(found.shift_sigmas[0]).all()
    for item in (found.values, found.shift_sigmas, found.chi2_predicted, found.chi2_predictive):
        assert not np.isnan(item).any()


def test_two_columns_that_only_one_group_tells_apart(rng):
    rows, observed = make(rng, [10, 10, 10], 3)
    for g in (1, 2):
        rows[g][:, 2] = 2.0 * rows[g][:, 1]
    found = leave_out(triangles(rows, observed, np.zeros(3)), range(3))
    assert list(found.determined) == [False, True, True]
    assert len(found.lost[0]) == 1 and found.lost[0][0] in (1, 2)


def test_the_only_group_leaves_nothing(rng):
    rows, observed = make(rng, [10], 3)
    found = leave_out(triangles(rows, observed, np.zeros(3)), [0])
    assert found.lost == ((0, 1, 2),)


def test_nuisance_parameters_go_with_their_group(rng):
    """A free offset of group 0 vanishes with it; the group is judged at the offset that suits it best."""
    rows, observed = make(rng, [8, 10, 10], 3)
    rows[0] = np.column_stack([rows[0][:, :2], np.ones(8)])
    for g in (1, 2):
        rows[g][:, 2] = 0.0
    found = leave_out(triangles(rows, observed, np.zeros(3)), range(3), nuisance=[2])
    a, y = np.concatenate(rows[1:])[:, :2], np.concatenate(observed[1:])
    values = np.linalg.lstsq(a, y)[0]
    np.testing.assert_allclose(found.values[0][:2], values, rtol=RTOL)
    assert found.determined.all()
    assert (found.n[0], found.dof[0]) == (8, 7)
    error = observed[0] - rows[0][:, :2] @ values
    centred = error - error.mean()
    np.testing.assert_allclose(found.chi2_predicted[0], centred @ centred, rtol=RTOL)
    # An offset without a prior is one with an enormous variance.
    predictive = np.eye(8) + 1e8 + rows[0][:, :2] @ np.linalg.inv(a.T @ a) @ rows[0][:, :2].T
    np.testing.assert_allclose(found.chi2_predictive[0], error @ np.linalg.solve(predictive, error), rtol=1e-5)
