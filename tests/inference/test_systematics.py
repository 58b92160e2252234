"""Tests of residuals: exact laws, planted faults, and silence on clean lines."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations, pairwise

import numpy as np
import pytest
from reference.thirteen_terms import BANDS, ISOTOPOLOGUE, SIGMA, SOURCES, TERMS, campaign
from scipy.stats import kstest

from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.systematics import LEVEL, _few_runs, find_systematics, in_words

# The same six bands from two sources.
TWICE = [(source, upper, lower) for source in (0, 1) for _, upper, lower in BANDS]


def fitted(lines, *, policy="stated"):
    return fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, policy=policy)


def clean(seed, **more):
    return campaign(np.random.default_rng(seed), factors=(1, 1, 1), **more)


def moved(lines, by):
    return replace(lines, position=lines.position + by)


def pick(found, **wanted):
    return [item for item in found if all(getattr(item, key) == value for key, value in wanted.items())]


@pytest.mark.parametrize(("plus", "minus"), [(3, 4), (5, 2), (4, 4), (2, 2), (7, 3)])
def test_number_of_runs_by_counting_every_order(plus, minus):
    counts = {}
    for places in combinations(range(plus + minus), plus):
        signs = [place in places for place in range(plus + minus)]
        runs = 1 + sum(a != b for a, b in pairwise(signs))
        counts[runs] = counts.get(runs, 0) + 1
    total, below = sum(counts.values()), 0
    for runs in sorted(counts):
        below += counts[runs]
        assert _few_runs(runs, plus, minus) == pytest.approx(below / total, rel=1e-12)


def test_mean_and_its_sigma_are_those_of_the_dense_residual_covariance():
    fit = fitted(clean(1))
    rows = fit.design.rows
    count = len(fit.design.used)
    a = rows.whitened
    q = np.linalg.qr(a)[0][:count]
    covariance = np.eye(count) - q @ q.T
    residual = (fit.residuals / fit.lines.sigma)[np.argsort(fit.design.row_of)]
    source = fit.lines.source[np.argsort(fit.design.row_of)]
    found = find_systematics(fit)
    for code, name in enumerate(SOURCES):
        weights = (source == code) / np.sum(source == code)
        (item,) = pick(found, source=name, band="", test="mean")
        assert item.size == pytest.approx(SIGMA * weights @ residual, rel=1e-6)
        assert item.sigma == pytest.approx(SIGMA * np.sqrt(weights @ covariance @ weights), rel=1e-6)


def test_a_slope_is_that_of_weighted_regression():
    fit = fitted(clean(2))
    (item,) = pick(find_systematics(fit), source=SOURCES[1], band="", test="trend", against="J")
    of_source = fit.lines.source == 1
    slope = np.polyfit(fit.lines.j_lower[of_source], fit.residuals[of_source], 1)[0]  # all lines weigh the same
    assert item.size == pytest.approx(slope, rel=1e-6)


def test_a_source_with_all_residuals_positive_is_flagged():
    """Two sources see the same bands; all lines of one lie above the fit."""
    lines = clean(3, bands=TWICE, shared=0, calibrated=False, j_max=25)
    fit = fitted(moved(lines, (lines.source == 0) * 2 * 6 * SIGMA))
    assert np.all(fit.residuals[lines.source == 0] > 0)
    (item,) = pick(find_systematics(fit), source=SOURCES[0], band="", test="mean")
    assert item.size > 0 and item.p < 1e-3 and item.adjusted < 1e-3
    assert "the mean" in in_words(item)


def test_a_scale_error_shows_against_position():
    lines = clean(4, bands=TWICE, shared=0, calibrated=False, j_max=25)
    fit = fitted(moved(lines, (lines.source == 0) * 1e-6 * lines.position))
    (item,) = pick(find_systematics(fit), source=SOURCES[0], band="", test="trend", against="position")
    assert item.adjusted < LEVEL
    # Both sources weigh the same, so that each shows half of the difference of their scales.
    assert item.size == pytest.approx(0.5e-6, rel=0.2)
    assert "position" in in_words(item)


def test_a_wave_along_m_shows_in_runs():
    """What neither a mean nor a slope sees."""
    lines = clean(5, shared=0, calibrated=False)
    m = np.where(lines.j_upper > lines.j_lower, lines.j_lower + 1, -lines.j_lower)
    of_band = (lines.v_upper == 2) & (lines.v_lower == 1)
    fit = fitted(moved(lines, of_band * 3 * SIGMA * np.sin(m / 4)))
    worst = find_systematics(fit)[0]
    assert (worst.test, worst.band, worst.against) == ("runs", f"{ISOTOPOLOGUE} 2-1", "m")
    assert worst.size < worst.expected
    assert "runs" in in_words(worst)


def test_what_the_fit_takes_away_entirely_is_not_tested():
    """A free offset leaves no mean residual."""
    lines = clean(6)
    lines = replace(lines, sources=(replace(lines.sources[0], offset=np.inf), *lines.sources[1:]))
    found = find_systematics(fitted(lines))
    assert not pick(found, source=SOURCES[0], band="", test="mean")
    assert pick(found, source=SOURCES[1], band="", test="mean")


def test_one_branch_is_not_tested_twice():
    """In pure rotation m = J'' + 1."""
    lines = clean(7)
    lines = lines.excluded((lines.v_upper == 1) & (lines.j_upper < lines.j_lower), "left out")
    found = find_systematics(fitted(lines))
    assert not pick(found, band=f"{ISOTOPOLOGUE} 1-0", against="J")
    assert pick(found, band=f"{ISOTOPOLOGUE} 1-0", test="trend", against="m")


def test_findings_are_in_order_and_adjusted():
    found = find_systematics(fitted(clean(8)))
    p = np.array([item.p for item in found])
    assert np.all(np.diff(p) >= 0)
    # Holm's first step, S. Holm, Scand. J. Stat. 6, 65 (1979).
    assert found[0].adjusted == pytest.approx(min(1.0, len(found) * p[0]))


@pytest.mark.slow
@pytest.mark.parametrize("policy", ["stated", "per-source"])
def test_clean_sets_are_left_in_peace(policy):
    """Any false alarm in fewer than 5 % of 200 clean sets; every p of a mean or trend uniform."""
    alarms, p = 0, []
    for number in range(200):
        found = find_systematics(fitted(clean([9, number], j_max=30), policy=policy))
        alarms += found[0].adjusted < LEVEL
        linear = [item for item in found if item.test != "runs"]
        linear.sort(key=lambda item: (item.source, item.band, item.against))
        p.append(linear[number % len(linear)].p)
    assert alarms < 10
    # A false alarm once in a thousand seeds.
    assert kstest(p, "uniform").pvalue > 1e-3
