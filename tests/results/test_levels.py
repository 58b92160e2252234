"""Energy levels against the formula, and the validity table against a search."""

from __future__ import annotations

import numpy as np
import pytest
from invented_molecule import BREAKDOWN, REFERENCE, TERMS, energy, simulated_lines

from dunhamfit.errors import UsageError
from dunhamfit.fit.solve import fit_lines
from dunhamfit.results.levels import energy_levels, validity
from dunhamfit.results.observed import ObservedLevels
from dunhamfit.results.predict import predict


@pytest.fixture(scope="module")
def fit():
    return fit_lines(simulated_lines(seed=1, j_max=20), TERMS, reference=REFERENCE, breakdown=BREAKDOWN)


def test_exact_levels_come_back():
    lines = simulated_lines(seed=1, j_max=20, scatter=False)
    fit = fit_lines(lines, TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
    found = energy_levels(fit, v_max=3, j_max=21, isotopologue="76Ge82Se")
    exact = energy("76Ge82Se", found.v, found.j) - energy("76Ge82Se", 0, 0)
    assert np.abs(found.energy - exact).max() < 1e-9
    assert (found.v[0], found.j[0], found.energy[0], found.sigma[0]) == (0, 0, 0.0, 0.0)


def test_differences_of_levels_are_lines(fit):
    levels = energy_levels(fit, v_max=2, j_max=10)
    at = {(v, j): e for v, j, e in zip(levels.v.tolist(), levels.j.tolist(), levels.energy, strict=True)}
    for record in predict(fit, v_upper=2, v_lower=0, j_max=9).records():
        upper, lower = (record["v_upper"], record["j_upper"]), (record["v_lower"], record["j_lower"])
        assert at[upper] - at[lower] == pytest.approx(record["position"], abs=1e-11)


def test_sigma_grows_away_from_the_zero_and_is_that_of_a_line(fit):
    """E(1, 1) - E(0, 0) is the line R(0) of 1-0."""
    levels = energy_levels(fit, v_max=1, j_max=1)
    line = predict(fit, v_upper=1, v_lower=0, j_max=0)
    assert levels.sigma[-1] == pytest.approx(line.sigma[0], rel=1e-12)


def test_validity_is_what_a_search_finds(fit):
    levels = energy_levels(fit, v_max=5, j_max=60, isotopologue="72Ge80Se")
    tolerance = 3e-4
    found = validity(levels, tolerance, ObservedLevels(fit))
    for row in found:
        j = -1
        while j < 60 and levels.sigma[(levels.v == row.v) & (levels.j == j + 1)][0] <= tolerance:
            j += 1
        assert row.j_max == j
        assert row.limited == (j < 60)
    # Lines of 1-0, 2-1, 2-0 and 3-1 up to J'' = 20: v = 0 is a lower level only.
    assert [row.j_observed for row in found] == [20, 21, 21, 21, -1, -1]
    with pytest.raises(UsageError, match="tolerance must be positive"):
        validity(levels, 0.0, ObservedLevels(fit))


def test_inside_is_told_for_each_level(fit):
    levels = energy_levels(fit, j_max=25)
    assert levels.v.max() == 3
    assert np.array_equal(levels.inside, levels.j <= np.where(levels.v == 0, 20, 21))
    assert not energy_levels(fit, j_max=3, isotopologue="70Ge82Se").inside.any()


def test_records_and_wrong_use(fit):
    levels = energy_levels(fit, v_max=1, j_max=2)
    wave, frequency = levels.records()[-1], levels.records("GHz")[-1]
    assert (wave["v"], wave["j"], wave["sigma_model"]) == (1, 2, None)
    assert frequency["energy"] == pytest.approx(wave["energy"] * 29.9792458, rel=1e-15)
    with pytest.raises(UsageError, match="cannot be given as wavelengths"):
        levels.records("um")
    with pytest.raises(UsageError, match="must be 0 or more"):
        energy_levels(fit, v_max=-1, j_max=3)


def test_covariance_gives_the_sigma_of_every_difference(fit):
    """Var(E1 - E2) = C11 - 2 C12 + C22, for the lines of 2-1."""
    levels = energy_levels(fit, v_max=2, j_max=12, isotopologue="70Ge82Se")
    covariance = levels.parts.covariance
    place = {(v, j): i for i, (v, j) in enumerate(zip(levels.v.tolist(), levels.j.tolist(), strict=True))}
    for record in predict(fit, v_upper=2, v_lower=1, j_max=11, isotopologue="70Ge82Se").records():
        a, b = place[2, record["j_upper"]], place[1, record["j_lower"]]
        variance = covariance[a, a] - 2 * covariance[a, b] + covariance[b, b]
        assert variance**0.5 == pytest.approx(record["sigma"], rel=1e-6)
