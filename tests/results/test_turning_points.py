"""Turning points and potential of a fit, against a potential whose levels and turning points are known exactly."""

from __future__ import annotations

import numpy as np
import pytest
from invented_molecule import BREAKDOWN, REFERENCE, TERMS, simulated_lines
from made_fits import fit_with
from reference.kratzer import EXACT_Y, level

from dunhamfit.errors import UsageError
from dunhamfit.fit.solve import fit_lines
from dunhamfit.results.turning_points import molecular_curve

# The Kratzer potential D (1 - r_e/r)^2 of tests/reference, with the reduced mass of 12C16O.
B, GAMMA = 1.93128, 561.75
DEPTH = B * GAMMA**2


@pytest.fixture(scope="module")
def kratzer():
    constants = {key: float(text) for key, text in EXACT_Y.items() if key != (0, 0)}
    return molecular_curve(fit_with(constants, reference="12C16O"), v_max=6)


def test_exact_turning_points(kratzer):
    """r = r_e/(1 +- sqrt(E/D)) where V = E; the semiclassical method is of first order, off by some 1e-6 r_e."""
    r_e = np.sqrt(16.857629168 / (kratzer.mu * B))
    exact = np.array([float(level(v, 0)) for v in range(7)])
    # Y00 to leading order is within 1e-5 cm-1 of the exact one, the series ends at Y50.
    assert kratzer.points.energy == pytest.approx(exact, abs=1e-4)
    root = np.sqrt(exact / DEPTH)
    assert kratzer.points.r_min == pytest.approx(r_e / (1 + root), rel=2e-6)
    assert kratzer.points.r_max == pytest.approx(r_e / (1 - root), rel=2e-6)


def test_exact_curve_and_what_it_gives_back(kratzer):
    grid = kratzer.grid
    r_e = np.sqrt(16.857629168 / (kratzer.mu * B))
    exact = DEPTH * (1 - r_e / grid.r) ** 2
    inside = ~grid.extrapolated
    assert np.abs(grid.energy - exact)[inside].max() < 0.2  # of 13000 cm-1: 1e-6 of r on the steep wall
    # The first-order method, measured: 2e-3 cm-1 and 1e-6 cm-1.
    assert np.abs(kratzer.check.origin).max() < 1e-2
    assert np.abs(kratzer.check.rotation).max() < 3e-6
    assert abs(kratzer.check.zero_point) < 2e-3


def test_sigmas_are_those_of_numerical_derivatives():
    fit = fit_lines(simulated_lines(seed=2, j_max=20), TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
    found = molecular_curve(fit, "72Ge80Se", v_max=2)
    moves = []
    fields = {name: getattr(fit, name) for name in ("model", "lines", "factor", "noise", "groups", "statistics")}
    for column in fit.factor.T:
        up, down = (
            molecular_curve(type(fit)(values=fit.values + sign * column, **fields), "72Ge80Se", v_max=2).points
            for sign in (1, -1)
        )
        moves.append(np.concatenate([up.r_min - down.r_min, up.r_max - down.r_max]) / 2)
    expected = np.sqrt(np.sum(np.square(moves), axis=0))
    # Rounding of r at 1e-16 against moves of 1e-8.
    sigmas = np.concatenate([found.points.r_min_sigma, found.points.r_max_sigma])
    assert sigmas == pytest.approx(expected, rel=1e-3)


def test_the_highest_observed_level_by_default():
    fit = fit_lines(simulated_lines(seed=3, j_max=20), TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
    found = molecular_curve(fit)
    assert found.points.v.tolist() == [0.0, 1.0, 2.0, 3.0]
    assert len(found.check.v) == 4
    assert np.abs(found.check.origin).max() < 1e-2
    assert found.isotopologue == REFERENCE


def test_wrong_use_is_told():
    with pytest.raises(UsageError, match="has no Y20, Y11"):
        molecular_curve(fit_with({(1, 0): 400.0, (0, 1): 0.1}, reference=REFERENCE))
    constants = {(1, 0): 400.0, (2, 0): -10.0, (0, 1): 0.1, (1, 1): -3e-4}
    with pytest.raises(UsageError, match="must rise up to the level"):
        molecular_curve(fit_with(constants, reference=REFERENCE), v_max=30)
    with pytest.raises(UsageError, match="highest v must be 0 or more"):
        molecular_curve(fit_with(constants, reference=REFERENCE), v_max=-1)
