"""The posterior of a fit as a record that grows, stops, goes on and refuses."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest
from simulated_campaign import FACTOR_RANGE, TERMS, campaign, fitted, noiseless, shifted

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.posterior import join
from dunhamfit.inference.sampling import ERROR_MODELS, TARGET_ESS, sample
from dunhamfit.inference.storing import pack, unpack

# Draws of one step: 4 ensembles of 16 walkers under Gaussian errors.
STEP = 64


@pytest.fixture(scope="module")
def fit():
    lines, _ = campaign(np.random.default_rng(7), "gaussian")
    return fitted(lines)


@pytest.fixture(scope="module")
def settled(fit):
    return sample(fit, seed=5)


def same(one, other) -> bool:
    """Every array and text equal, bit for bit."""
    first, second = pack(one), pack(other)
    return first.keys() == second.keys() and all(equal(first[name], second[name]) for name in first)


def equal(one, other) -> bool:
    if isinstance(one, np.ndarray) and one.dtype.kind == "f":
        return np.array_equal(one, other, equal_nan=True)
    return np.array_equal(one, other)


# --- length ---------------------------------------------------------------------------------------------


def test_default_length_reaches_the_target(settled):
    found = settled.diagnostics
    assert settled.converged and settled.stamp == ""
    assert found.ess.min() >= TARGET_ESS and found.length >= 50


def test_quantities_are_parameters_then_noise_factors(settled, fit):
    assert settled.names == (*fit.model.names, "factor[oven]", "factor[jet]")
    assert set(settled.draws) == set(settled.names)
    assert settled.draws["Y10"].shape == (settled.total - settled.discarded * STEP,)


@pytest.mark.parametrize("model", ERROR_MODELS)
def test_total_counts_all_draws_and_more_counts_new_ones(fit, model):
    whole = sample(fit, seed=3, total=10 * STEP, model=model)
    first = sample(fit, seed=3, total=4 * STEP, model=model)
    by_total = sample(fit, start=first, total=10 * STEP, model=model)
    by_more = sample(fit, start=first, more=6 * STEP, model=model)
    assert whole.total == by_total.total == by_more.total == 10 * STEP
    assert same(whole, by_total) and same(whole, by_more)


def test_length_is_rounded_up_to_whole_steps(fit):
    assert sample(fit, seed=3, total=STEP + 1).total == 2 * STEP


def test_a_total_that_is_there_already_adds_nothing(fit, settled):
    assert same(sample(fit, start=settled, total=STEP), settled)


def test_one_seed_gives_one_chain_and_another_seed_another(fit):
    one, again, other = (sample(fit, seed=seed, total=STEP) for seed in (1, 1, 2))
    assert same(one, again)
    assert not np.any(one.chain == other.chain)


def test_a_seed_that_was_not_given_is_stored(fit):
    first = sample(fit, total=STEP)
    assert same(sample(fit, total=STEP, seed=first.seed), first)


def test_ensembles_are_seeded_independently(settled):
    first = settled.chain[0, :, 0, 0]
    assert len(np.unique(first)) == len(first) == 4


# --- interruption and storage ---------------------------------------------------------------------------


def test_interrupt_keeps_what_is_finished_and_resumes_bit_for_bit(fit):
    pieces = []

    def stop(piece):
        pieces.append(piece)
        if len(pieces) == 2:
            raise KeyboardInterrupt

    stopped = sample(fit, seed=9, total=200 * STEP, on_block=stop)
    assert stopped.interrupted and stopped.total == sum(piece.total for piece in pieces) < 200 * STEP
    assert same(replace(join(pieces), interrupted=True), stopped)
    resumed = sample(fit, start=unpack(pack(stopped)), total=200 * STEP)
    assert not resumed.interrupted
    assert same(resumed, sample(fit, seed=9, total=200 * STEP))


def test_interrupt_before_anything_is_finished_goes_through(fit):
    def stop(done, total):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        sample(fit, seed=9, total=STEP, progress=stop)


def test_progress_counts_draws(fit):
    seen = []
    sample(fit, seed=1, total=120 * STEP, progress=lambda done, total: seen.append((done, total)))
    assert seen[0] == (0, 120 * STEP) and seen[-1] == (120 * STEP, 120 * STEP)


@pytest.mark.parametrize("model", ERROR_MODELS)
def test_packing_loses_nothing(fit, model):
    posterior = sample(fit, seed=1, total=STEP, model=model)
    restored = unpack(pack(posterior))
    assert same(posterior, restored)
    assert restored.quantities[0] == posterior.quantities[0]
    assert restored.priors == posterior.priors and restored.identity == posterior.identity


def test_a_packed_posterior_is_plain(settled):
    for content in pack(settled).values():
        plain = isinstance(content, str) or (isinstance(content, tuple) and all(isinstance(x, str) for x in content))
        assert plain or content.dtype.kind in "fiub"


def test_a_stored_posterior_is_read_without_the_sampler():
    code = "import sys, dunhamfit.inference.storing; sys.exit(any(m in sys.modules for m in ('emcee', 'scipy.stats')))"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


# --- refusals -------------------------------------------------------------------------------------------


def test_a_chain_is_not_continued_for_other_lines(fit, settled):
    moved = np.zeros(len(fit.lines))
    moved[3] = 1e-9
    other = fitted(shifted(fit.lines, moved))
    with pytest.raises(UsageError, match="belongs to another fit: the lines have changed"):
        sample(other, start=settled, more=STEP)


def test_a_chain_is_not_continued_for_other_terms(fit, settled):
    other = fit_lines(
        fit.lines, TERMS, reference="28Si32S", policy="per-source", priors={"Y20": Prior(-2.75, 1e-3)}
    )
    with pytest.raises(UsageError, match="the terms have changed"):
        sample(other, start=settled, more=STEP)


@pytest.mark.parametrize("change", [{"model": "student"}, {"factor_range": (0.1, 10.0)}])
def test_a_chain_is_not_continued_for_another_error_model(fit, settled, change):
    with pytest.raises(UsageError, match="the error model has changed"):
        sample(fit, start=settled, more=STEP, **change)


def test_a_chain_is_not_continued_for_another_policy(fit, settled):
    with pytest.raises(UsageError, match="the error model has changed"):
        sample(fitted(fit.lines, policy="common"), start=settled, more=STEP)


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"model": "cauchy"}, "error model 'cauchy' is not known; use one of gaussian, student, outliers"),
        ({"total": 10, "more": 10}, "not both"),
        ({"more": 10}, "no stored posterior that 'more' could add to"),
        ({"total": 0}, r"'total' must be at least 1 draw \(got 0\)"),
        ({"seed": -1}, "seed must be between"),
        ({"factor_range": (2.0, 1.0)}, "range of noise factors"),
    ],
)
def test_calls_that_contradict_themselves(fit, options, text):
    with pytest.raises(UsageError, match=text):
        sample(fit, **options)


def test_gaussian_errors_are_refused_for_a_robust_fit(fit):
    robust = fit_lines(fit.lines, TERMS, reference="28Si32S", policy="per-source", robust="huber")
    with pytest.raises(UsageError, match=r"robust .loss 'huber'.*'student' or 'outliers'"):
        sample(robust)
    assert sample(robust, seed=1, total=1, model="student").total > 0


def test_relations_between_terms_are_refused(fit):
    tied = replace(fit, factor=np.array(fit.factor[:, :-1]))
    with pytest.raises(UsageError, match="5 of them but only 4 independent directions"):
        sample(tied)


def test_the_seed_of_a_chain_is_not_changed(fit, settled):
    with pytest.raises(UsageError, match="was started with seed 5"):
        sample(fit, start=settled, more=STEP, seed=6)


def test_a_name_that_was_not_sampled(settled):
    with pytest.raises(UsageError, match="'Y99' was not sampled; there are Y10"):
        settled.quantile("Y99", 0.5)


# --- what is said of a chain ----------------------------------------------------------------------------


def test_a_short_chain_gives_no_quantiles_unless_forced(fit):
    short = sample(fit, seed=1, total=10 * STEP)
    assert not short.converged
    assert all(row.quantiles is None for row in short.summary())
    with pytest.raises(NotConverged, match=r"autocorrelation times long and 50 are needed.*force it"):
        short.quantile("Y10", 0.5)
    forced = sample(fit, start=short, total=10 * STEP, force=True)
    assert all(len(row.quantiles) == 3 for row in forced.summary())
    assert forced.stamp.startswith("NOT CONVERGED") and "forced" in forced.stamp


def test_summary_is_that_of_the_draws(settled):
    row = settled.summary()[0]
    draws = settled.draws["Y10"]
    assert row.mean == draws.mean() and row.sd == draws.std(ddof=1)
    assert row.quantiles[1] == np.median(draws)
    assert row.mcse == pytest.approx(row.sd / np.sqrt(row.ess), rel=1e-3)  # ddof


def test_priors_are_stated(settled):
    text = "\n".join(settled.priors)
    assert "Y10, Y20, Y01, Y11: uniform without bounds" in text
    assert "offset[oven]: Gaussian, 0 +- 0.0002 cm-1" in text
    assert "noise factors: ln f uniform, f between 1e-06 and 1e+06" in text


def test_stated_uncertainties_leave_an_exact_posterior(fit):
    stated = fitted(fit.lines, policy="stated")
    posterior = sample(stated, seed=1)
    assert posterior.exact and posterior.converged and posterior.total == TARGET_ESS
    assert any("analytic posterior of the fit is exact" in note for note in posterior.notes)
    for row, value, sigma in zip(posterior.summary(), stated.values, stated.sigmas, strict=True):
        assert row.mean == value
        assert row.sd == pytest.approx(sigma, rel=1e-12)
        assert row.mcse == 0
        # 16 % and 84 % of the unit Gaussian (any table: 0.9945).
        assert (row.quantiles[2] - value) / sigma == pytest.approx(0.99446, abs=1e-4)
    more = sample(stated, start=posterior, more=500)
    assert same(more, sample(stated, seed=1, total=1500))


def test_exact_draws_have_the_covariance_of_the_fit(fit):
    stated = fitted(fit.lines, policy="stated")
    # Of 20 numbers one may pass 3 standard errors in every twentieth seed; the seed is fixed.
    posterior = sample(stated, seed=1, total=20_000)
    flat = posterior.chain.reshape(-1, len(stated.values))
    whitened = np.linalg.solve(stated.factor, (flat - stated.values).T)
    covariance = np.cov(whitened)
    # 3 Monte Carlo standard errors: 1/sqrt(N) of a mean and of a covariance, sqrt(2/N) of a variance.
    assert np.abs(whitened.mean(axis=1)).max() < 3 / np.sqrt(20_000)
    assert np.abs(covariance - np.eye(len(covariance))).max() < 3 * np.sqrt(2 / 20_000)


def test_fixed_parameters_are_not_sampled_but_named():
    lines = noiseless()
    rng = np.random.default_rng(1)
    fit = fit_lines(
        shifted(lines, 1e-4 * rng.standard_normal(len(lines))),
        TERMS,
        reference="28Si32S",
        policy="per-source",
        priors={"Y20": Prior(-2.75, 0.0)},
    )
    posterior = sample(fit, seed=1, total=STEP, factor_range=FACTOR_RANGE)
    assert "Y20" not in posterior.names
    assert "held at the value given: Y20" in posterior.notes
