"""Bands that arrive: the test before the merge keeps its level and has power, and shifts have the size they claim."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from arriving_band import NEW, OFFSET_SIGMA, SIGMA, exact_lines, fitted, moved, noisy, old_lines, simulate
from scipy.stats import chi2 as chi2_law

from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.update import extended_model, update_fit
from dunhamfit.inference.arrival import check_arrival
from dunhamfit.inference.shifts import band_shifts, parameter_shifts, terms_within_reach
from dunhamfit.lines.line_list import Source, merge
from dunhamfit.molecule.terms import Term


@pytest.fixture
def rng() -> np.random.Generator:
    """A seed whose new band is none of the 5 % that are rejected by chance."""
    return np.random.default_rng(2)


@pytest.fixture
def campaign(rng):
    """The fit of noisy old lines, and a new band that agrees with them."""
    return fitted(noisy(old_lines(), rng)), noisy(exact_lines(*NEW), rng)


def derivatives(fit, lines):
    """dE/dY of every line in plain floats, terms in the order of the model."""

    def level(v, j):
        return np.array([(v + 0.5) ** t.k * (j * (j + 1.0)) ** t.l for t in fit.model.terms])

    return (level(lines.v_upper, lines.j_upper) - level(lines.v_lower, lines.j_lower)).T


def test_chi2_is_that_of_the_full_covariance(campaign):
    """r^T (S + A C A^T + offset)^-1 r, inverted as a whole by numpy."""
    fit, new = campaign
    a = derivatives(fit, new)
    residual = new.position - a @ fit.values[: a.shape[1]]
    covariance = np.diag(new.sigma**2) + a @ fit.covariance @ a.T + OFFSET_SIGMA**2
    found = check_arrival(fit, new)
    expected = residual @ np.linalg.solve(covariance, residual)
    # Positions of 700 cm-1 in plain floats are good to 1e-13 cm-1, 1e-9 of sigma.
    assert found.chi2 == pytest.approx(expected, rel=1e-7)
    assert found.dof == found.lines == len(new)
    assert found.p == pytest.approx(chi2_law.sf(expected, len(new)), rel=1e-5)


def test_offset_is_that_of_generalised_least_squares(campaign):
    """(1^T V^-1 r) / (1^T V^-1 1) with V the whole covariance (A. C. Aitken, Proc. R. Soc. Edinb. 55, 42 (1936))."""
    fit, new = campaign
    new = moved(new, 3e-4)
    a, one = derivatives(fit, new), np.ones(len(new))
    residual = new.position - a @ fit.values[: a.shape[1]]
    inverse = np.linalg.inv(np.diag(new.sigma**2) + a @ fit.covariance @ a.T + OFFSET_SIGMA**2)
    offset = next(item for item in check_arrival(fit, new).shifts if item.kind == "offset")
    assert offset.value == pytest.approx(one @ inverse @ residual / (one @ inverse @ one), rel=1e-6)
    assert offset.sigma == pytest.approx((one @ inverse @ one) ** -0.5, rel=1e-6)


def test_free_offset_is_no_explanation_and_costs_a_degree_of_freedom(campaign):
    fit, new = campaign
    free = moved(exact_lines(*NEW, offset=np.inf), new.position - exact_lines(*NEW).position + 1e-2)
    found = check_arrival(fit, free)
    assert [item.kind for item in found.shifts] == ["scale"]
    assert found.dof == len(free) - 1
    assert found.agrees


def test_wrong_lines_are_named(campaign):
    fit, new = campaign
    errors = np.zeros(len(new))
    errors[[7, 40]] = 12 * SIGMA, -30 * SIGMA
    found = check_arrival(fit, moved(new, errors))
    assert not found.agrees and found.explanation == "single lines"
    assert [item.label for item in found.deviations] == [new.label(40), new.label(7)]
    # Noise of 1 sigma, and the uncertainty of the prediction, which is smaller.
    assert found.deviations[0].residual == pytest.approx(-30 * SIGMA, abs=4 * SIGMA)


def test_understated_noise_is_named(rng):
    fit, exact = fitted(noisy(old_lines(), rng)), exact_lines(*NEW)
    found = check_arrival(fit, moved(exact, rng.normal(0, 3 * SIGMA, len(exact))))
    assert not found.agrees and found.explanation == "noise"
    # chi of some 90 degrees of freedom: 1 sigma is 7 %.
    assert found.scatter == pytest.approx(3.0, rel=0.3)


def test_wrong_band_has_no_easy_explanation(campaign):
    """J one too high throughout (positions of J + 1): the constants cannot follow."""
    fit, new = campaign
    wrong = moved(new, np.roll(new.position, 1) - new.position)
    assert check_arrival(fit, wrong).explanation == "none"


def test_lines_left_out_do_not_count(campaign):
    fit, new = campaign
    spoilt = moved(new, np.where(np.arange(len(new)) == 5, 1.0, 0.0)).excluded(np.arange(len(new)) == 5, "blend")
    found = check_arrival(fit, spoilt)
    assert found.agrees and found.lines == len(new) - 1
    with pytest.raises(CannotDetermine, match="no line is used"):
        check_arrival(fit, new.excluded(new.used, "all"))


def test_one_new_source_at_a_time(campaign):
    fit, new = campaign
    with pytest.raises(UsageError, match="one source"):
        check_arrival(fit, merge([new, exact_lines("another", 3, 2, 5)]))
    with pytest.raises(UsageError, match="there is a source 'oven' already"):
        check_arrival(fit, exact_lines("oven", 3, 2, 5, offset=None))


@pytest.mark.slow
def test_level_power_and_shifts():
    """2,000 simulated campaigns: rejections at the 5 % level, a 5-sigma offset, and the rms of nested shifts."""
    found = simulate(2000, seed=20260101)
    # 5 % of 2,000 has a standard deviation of 0.5 %; 4 to 6 % is what the project promises.
    assert 0.04 <= 1 - np.mean([item.agrees for item in found.agreeing]) <= 0.06
    assert 0.04 <= np.mean([item.p < 0.05 for item in found.agreeing]) <= 0.06
    assert np.mean([not item.agrees for item in found.shifted]) >= 0.95
    # The rms of 2,000 standard normal numbers is 1.000(16).
    rms = np.sqrt(np.mean(found.shifts**2, axis=0))
    assert np.all((rms > 0.95) & (rms < 1.05)), rms


def test_shift_is_the_difference_and_its_sigma(campaign):
    fit, new = campaign
    merged = update_fit(fit, new)
    moved_by = parameter_shifts(fit, merged)
    assert [item.name for item in moved_by] == list(fit.model.names)
    lost = np.diag(fit.parameter_covariance) - np.diag(merged.parameter_covariance)[: len(fit.values)]
    for item, variance, old, new_value in zip(moved_by, lost, fit.values, merged.values, strict=False):
        assert item.shift == new_value - old
        assert item.sigma_shift == pytest.approx(np.sqrt(variance), rel=1e-6)
    assert all(np.isnan(item.in_sigma) for item in parameter_shifts(fit, merged, nested=False))
    assert all(np.isnan(item.in_sigma) for item in parameter_shifts(fit, fit))


def test_bands_move_as_their_lines_do(campaign):
    """From the triangles alone the same as from every line."""
    fit, new = campaign
    merged = update_fit(fit, new)
    count = len(fit.constants)
    change = derivatives(fit, fit.lines) @ (merged.values - np.append(fit.values, 0.0))[:count] / fit.lines.sigma
    by_band = {item.band: item.shift for item in band_shifts(fit, merged)}
    for name, upper, lower in (("oven", 1, 0), ("oven", 2, 1), ("jet", 2, 0)):
        code = [source.name for source in fit.lines.sources].index(name)
        chosen = (fit.lines.source == code) & (fit.lines.v_upper == upper) & (fit.lines.v_lower == lower)
        expected = np.sqrt(np.mean(change[chosen] ** 2))
        assert by_band[f"{name} 28Si32S {upper}-{lower}"] == pytest.approx(expected, rel=1e-6)


def test_term_within_reach_is_what_a_fit_with_it_gives(campaign):
    """v = 3 makes Y30 known; numpy's least squares with the further column, priors as rows, is the check."""
    fit, new = campaign
    merged = update_fit(fit, new)
    found = {item.name: item for item in terms_within_reach(fit, merged)}
    assert list(found) == ["Y30", "Y21", "Y12", "Y03"]
    y30 = found["Y30"]
    # Three vibrational levels make two differences: they cannot tell three terms.
    assert np.isinf(y30.sigma_old) and np.isfinite(y30.sigma)
    lines = merged.lines
    model = extended_model(fit.model, new)
    assert Term(3, 0) not in model.terms
    cubes = (lines.v_upper + 0.5) ** 3 - (lines.v_lower + 0.5) ** 3
    offsets = np.stack([lines.source == code for code in range(len(lines.sources))], axis=1)
    whole = np.column_stack([derivatives(fit, lines), offsets, cubes]) / SIGMA
    priors = np.zeros((3, whole.shape[1]))
    priors[range(3), range(len(fit.constants), len(fit.constants) + 3)] = 1 / OFFSET_SIGMA
    rows = np.vstack([whole, priors])
    norms = np.linalg.norm(rows, axis=0)
    r = np.linalg.qr(rows / norms, mode="r")
    sigma = np.linalg.norm(np.linalg.inv(r), axis=1)[-1] / norms[-1]
    target = np.append(lines.position / SIGMA, np.zeros(3))
    value = np.linalg.lstsq(rows / norms, target, rcond=None)[0][-1] / norms[-1]
    assert y30.sigma == pytest.approx(sigma, rel=1e-6)
    assert y30.value == pytest.approx(value, abs=1e-5 * sigma)


def test_sources_without_shared_errors(rng):
    plain = exact_lines(*NEW, offset=None)
    fit = fitted(noisy(old_lines(), rng))
    assert check_arrival(fit, noisy(plain, rng)).dof == len(plain)
    assert plain.sources == (Source("winter"),)


def test_scatter_about_own_constants_is_that_of_the_noise(campaign):
    """A scale with a prior must not take the noise away: its column holds the observed positions."""
    fit, new = campaign
    scaled = replace(new, sources=(replace(new.sources[0], scale=5e-8),))
    found = check_arrival(fit, scaled)
    assert found.scatter == pytest.approx(check_arrival(fit, new).scatter, rel=1e-12)
    # About 94 degrees of freedom: four standard deviations of the root of their reduced chi2.
    assert found.scatter == pytest.approx(1.0, abs=4 / np.sqrt(2 * 94))
