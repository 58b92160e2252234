"""Leave-one-out against actual refits, and the bootstrap against the covariance of a model that is right."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from reference.thirteen_terms import BANDS, ISOTOPOLOGUE, OFFSET_SIGMA, SOURCES, TERMS, TRUTH, campaign
from scipy.stats import kstest

from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.resample import bootstrap, leave_one_out
from dunhamfit.lines.line_list import line_columns
from dunhamfit.molecule.terms import TermSet

# Exact algebra on rows of condition 1e3: rounding is far below a millionth of a sigma.
IN_SIGMA = 1e-6
RTOL = 1e-6


def fitted(lines, *, policy="stated", terms=TERMS, **more):
    return fit_lines(lines, terms, reference=ISOTOPOLOGUE, policy=policy, **more)


@pytest.fixture(scope="module")
def lines():
    return campaign(np.random.default_rng(11), factors=(1, 1, 1))


@pytest.fixture(scope="module")
def fit(lines):
    return fitted(lines)


def of_band(lines, label):
    upper, lower = map(int, label.split()[1].split("-"))
    return (lines.v_upper == upper) & (lines.v_lower == lower)


def test_without_each_band_is_an_actual_refit(lines, fit):
    found = leave_one_out(fit, "band")
    assert [item.label for item in found] == [f"{ISOTOPOLOGUE} {u}-{l}" for u, l in sorted(b[1:] for b in BANDS)]
    compared = 0
    for item in found:
        out = of_band(lines, item.label)
        assert item.lines == out.sum()
        try:
            rest = fitted(lines.excluded(out, "left out"))
        except CannotDetermine as refusal:
            assert not item.determined
            assert set(refusal.terms) & set(item.undetermined)
            continue
        compared += 1
        assert item.determined
        assert np.all(np.abs(item.values - rest.values) < IN_SIGMA * rest.sigmas)
        # The sigma of a nested shift: sqrt(diag(C_without - C)).
        spread = np.sqrt(np.maximum(rest.sigmas**2 - fit.sigmas**2, 0))
        np.testing.assert_allclose(item.shift_sigmas, spread, rtol=1e-4, atol=1e-6 * fit.sigmas.max())
        # Residuals of all lines, excluded ones too, at the constants of the refit.
        predicted = rest.residuals[out] / lines.sigma[out]
        np.testing.assert_allclose(item.error, np.sqrt(np.mean(predicted**2)), rtol=RTOL)
    assert compared >= 3


def test_without_each_source_is_an_actual_refit(lines, fit):
    for item in leave_one_out(fit, "source"):
        out = lines.source == SOURCES.index(item.label)
        try:
            rest = fitted(lines.excluded(out, "left out"))
        except CannotDetermine:
            assert not item.determined
            continue
        kept = [fit.model.names.index(name) for name in rest.model.names]
        assert np.all(np.abs(item.values[kept] - rest.values) < IN_SIGMA * rest.sigmas)


def test_a_free_offset_goes_with_its_source(lines):
    sources = (lines.sources[0], replace(lines.sources[1], offset=np.inf), lines.sources[2])
    lines = replace(lines, sources=sources)
    # Few terms, so that two sources determine them.
    terms = TermSet.from_orders([2, 1, 0])
    fit = fitted(lines, terms=terms)
    (item,) = (item for item in leave_one_out(fit, "source") if item.label == SOURCES[1])
    rest = fitted(lines.excluded(lines.source == 1, "left out"), terms=terms)
    assert item.determined
    assert item.dof == item.lines - 1
    kept = [fit.model.names.index(name) for name in rest.model.names]
    assert np.all(np.abs(item.values[kept] - rest.values) < IN_SIGMA * rest.sigmas)


def test_noise_factors_are_held(lines):
    """With the factors of the fit as its stated uncertainties, a refit without the band agrees."""
    fit = fitted(lines, policy="per-source")
    held = replace(lines, sigma=lines.sigma * fit.noise.factors[lines.source])
    (item,) = (item for item in leave_one_out(fit, "band") if item.label.endswith("1-0"))
    rest = fitted(held.excluded(of_band(lines, item.label), "left out"))
    assert np.all(np.abs(item.values - rest.values) < IN_SIGMA * rest.sigmas)


def test_what_cannot_be_told_is_named_and_nothing_is_nan(lines):
    found = {item.label: item for item in leave_one_out(fitted(lines), "band")}
    alone = found[f"{ISOTOPOLOGUE} 4-3"]  # the only band that reaches v = 4
    assert "Y40" in alone.undetermined
    assert alone.p == 1.0 and np.isinf(alone.error)
    for item in found.values():
        for numbers in (item.values, item.shifts, item.shift_sigmas, item.chi2, item.p, item.error):
            assert not np.any(np.isnan(numbers))


def test_fixed_constants_stay(lines):
    fit = fitted(lines, priors={"Y13": Prior(TRUTH[1, 3], 0.0)})
    for item in leave_one_out(fit, "band"):
        assert item.values[fit.index(1, 3)] == TRUTH[1, 3]
        assert item.shift_sigmas[fit.index(1, 3)] == 0 or not item.determined


@pytest.mark.slow
def test_predictions_of_left_out_bands_keep_their_promise():
    """p of the full-covariance chi-square is uniform; the bands of one fit share lines, so one of each is looked at."""
    p = []
    for number in range(200):
        fit = fitted(campaign(np.random.default_rng([5, number]), factors=(1, 1, 1), j_max=25))
        known = [item.p for item in leave_one_out(fit, "band") if item.determined]
        p.append(known[number % len(known)])
    # A false alarm once in a thousand seeds.
    assert kstest(p, "uniform").pvalue > 1e-3


# --- bootstrap --------------------------------------------------------------------------------------------


def test_bootstrap_by_line_finds_the_sigmas_of_a_model_that_is_right(fit):
    found = bootstrap(fit, resamples=600, seed=3)
    # 600 resamples know a standard deviation to 1/sqrt(1200) = 3 %; the sample itself, 121 lines a band, to
    # some 6 %; four of their joint standard deviations are 27 %.
    assert np.all(np.abs(found.sigmas / fit.sigmas - 1) < 0.27)
    low, middle, high = found.percentiles()
    assert np.all((low < middle) & (middle < high))
    assert found.undetermined == 0
    # The mean of 600 resamples lies within 5 / sqrt(600) sigma of the fit; a second-order bias adds little.
    assert np.all(np.abs(found.values.mean(axis=0) - fit.values) < (5 / np.sqrt(600) + 0.1) * fit.sigmas)


def test_bootstrap_redraws_priors(lines):
    """An offset that the lines hardly tell keeps the spread of its prior."""
    fit = fitted(lines)
    place = fit.model.names.index(f"offset[{SOURCES[2]}]")
    found = bootstrap(fit, resamples=600, seed=4)
    assert fit.sigmas[place] > 0.9 * OFFSET_SIGMA
    np.testing.assert_allclose(found.sigmas[place], fit.sigmas[place], rtol=0.15)


def test_bootstrap_by_band_of_many_bands():
    """48 bands of a model with three terms: as many resampled units as make a standard deviation to some 20 %."""
    bands = [(0, upper, lower) for upper in range(1, 10) for lower in range(upper)][:48]
    lines = campaign(np.random.default_rng(2), factors=(1, 1, 1), bands=bands, j_max=6, shared=0, calibrated=False)
    fit = fitted(lines)
    few = bootstrap(fit, by="band", resamples=400, seed=5)
    assert np.all((few.sigmas / fit.sigmas > 0.5) & (few.sigmas / fit.sigmas < 1.6))


def test_bootstrap_by_few_bands_is_refused(fit):
    with pytest.raises(CannotDetermine, match="resamples by band determine the model"):
        bootstrap(fit, by="band", resamples=50, seed=1)


def test_the_seed_decides(fit):
    first, again, other = (bootstrap(fit, resamples=5, seed=seed).values for seed in (1, 1, 2))
    assert np.array_equal(first, again)
    assert not np.array_equal(first, other)


def test_repeats_are_drawn_line_by_line():
    """The same lines measured twice by the same sources: rows are pooled, and yet lines are drawn."""
    first, second = (
        campaign(np.random.default_rng(seed), factors=(1, 1, 1), shared=0, calibrated=False) for seed in (8, 9)
    )
    columns = {
        item.name: np.concatenate([getattr(first, item.name), getattr(second, item.name)]) for item in line_columns()
    }
    fit = fitted(replace(first, **columns))
    assert len(fit.design.rows.scale) == len(first)
    found = bootstrap(fit, resamples=600, seed=1)
    # As above.
    assert np.all(np.abs(found.sigmas / fit.sigmas - 1) < 0.27)


def test_progress_is_told(fit):
    told = []
    bootstrap(fit, resamples=3, seed=1, progress=lambda *state: told.append(state))
    assert told == [(1, 3), (2, 3), (3, 3)]


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda fit: leave_one_out(fit, "line"), "by 'band' or by 'source'"),
        (lambda fit: bootstrap(fit, by="source", seed=1), "by 'line' or by 'band'"),
        (lambda fit: bootstrap(fit, resamples=1, seed=1), "two resamples at least"),
    ],
)
def test_wrong_use(fit, call, words):
    with pytest.raises(UsageError, match=words):
        call(fit)


def test_a_fit_whose_parameters_are_tied_is_refused(fit):
    moved = replace(fit, values=fit.values + 0.1 * fit.sigmas)
    with pytest.raises(UsageError, match="tie them"):
        leave_one_out(moved, "band")
