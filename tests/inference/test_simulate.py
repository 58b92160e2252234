"""Coverage: intervals hold the truth as often as they say, in simulations that know it."""

from __future__ import annotations

from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import replace
from multiprocessing import get_context

import numpy as np
import pytest
from reference.thirteen_terms import (
    ISOTOPOLOGUE,
    NOISE_FACTORS,
    OFFSET_SIGMA,
    SCALE_SIGMA,
    SIGMA,
    SOURCES,
    TERMS,
    TRUTH,
    VALUES,
    campaign,
)

from dunhamfit.algebra.criteria import coverage_factor
from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.simulate import LEVELS, coverage, simulate_lines
from dunhamfit.molecule.terms import TermSet


def fitted(lines, *, policy="per-source", terms=TERMS, **more):
    return fit_lines(lines, terms, reference=ISOTOPOLOGUE, policy=policy, **more)


@pytest.fixture(scope="module")
def fit():
    return fitted(campaign(np.random.default_rng(31)))


def binomial(found: np.ndarray, level: float, sets: int) -> np.ndarray:
    """Distance of coverages from `level`, in binomial standard deviations."""
    return (found - level) / np.sqrt(level * (1 - level) / sets)


# 13 constants at two levels: four standard deviations are passed by chance once in 600 seeds.
FAR = 4.0


@pytest.mark.slow
def test_intervals_of_simulated_campaigns_cover_and_naive_ones_do_not():
    """The campaign of `benchmarks/coverage.py`, 250 times: noise factors 0.5, 1 and 3, shared scales and offsets."""
    z, naive, factors = [], [], []
    for number in range(250):
        good = fitted(campaign(np.random.default_rng([77, number])))
        bad = fitted(campaign(np.random.default_rng([77, number]), calibrated=False), policy="stated")
        z.append((good.values[: len(VALUES)] - VALUES) / good.sigmas[: len(VALUES)])
        naive.append((bad.values - VALUES) / bad.sigmas)
        factors.append(good.noise.factors)
    for level in LEVELS:
        covered = (np.abs(z) <= coverage_factor(level)).mean(axis=0)
        assert np.all(np.abs(binomial(covered, level, 250)) < FAR)
        covered = (np.abs(naive) <= coverage_factor(level)).mean(axis=0)
        assert np.all(binomial(covered, level, 250) < -FAR)
    # Found with 242 lines each, so to 1/sqrt(484) = 4.5 %; the mean of 250 to 0.3 %.
    np.testing.assert_allclose(np.mean(factors, axis=0), NOISE_FACTORS, rtol=0.015)
    assert np.all(np.std(factors, axis=0) < 0.06 * np.array(NOISE_FACTORS))


def test_coverage_of_the_users_own_lines(fit):
    found = coverage(fit, sets=250, seed=1)
    assert found.names == tuple(item.name for item in fit.constants)
    assert (found.sets, found.failures) == (250, ())
    for level, covered, sigma in zip(LEVELS, found.covered, found.covered_sigmas, strict=True):
        assert np.all(np.abs(binomial(covered, level, 250)) < FAR)
        assert sigma == pytest.approx(np.sqrt(level * (1 - level) / 250))
    np.testing.assert_allclose(found.noise.mean(axis=0), fit.noise.factors, rtol=0.02)
    # 68.3 % to 0.683, and 1.96, hardly changed by some 700 degrees of freedom.
    np.testing.assert_allclose(found.factors[0], 1.0, atol=0.01)
    np.testing.assert_allclose(found.factors[1], 1.96, atol=0.02)


@pytest.mark.parametrize("policy", ["stated", "per-source"])
def test_a_fit_whose_parameters_are_tied_is_refused(fit, policy):
    fit = fitted(fit.lines, policy=policy)
    with pytest.raises(UsageError, match="tie them"):
        coverage(replace(fit, values=fit.values + fit.sigmas), sets=1, seed=1)


@pytest.mark.slow
def test_few_lines_with_one_common_factor_follow_student():
    """Exact for one factor: t with n - p degrees of freedom, here 5, where the normal 95 % would cover 89 %."""
    bands = ((0, 1, 0), (0, 2, 1))
    lines = campaign(np.random.default_rng(2), factors=(1, 1, 1), shared=0, calibrated=False, j_max=2, bands=bands)
    fit = fitted(lines, policy="common", terms=TermSet.from_orders([2, 1, 0]))
    assert fit.statistics.dof == 5
    found = coverage(fit, sets=400, seed=3)
    assert found.factors[1][0] == pytest.approx(2.571, abs=5e-4)  # Student's t, table of JCGM 100:2008, G.2
    for level, covered in zip(LEVELS, found.covered, strict=True):
        assert np.all(np.abs(binomial(covered, level, 400)) < FAR)


def test_priors_of_constants_are_drawn_and_fixed_ones_left_out():
    lines = campaign(np.random.default_rng(3), shared=0, calibrated=False, factors=(1, 1, 1), j_max=20)
    priors = {"Y13": Prior(TRUTH[1, 3], 0.0), "Y03": Prior(TRUTH[0, 3], 1e-15)}
    fit = fitted(lines, policy="stated", priors=priors)
    # The prior rules Y03: a coverage of the prior's own draws.
    assert fit.sigma(0, 3) == pytest.approx(1e-15, rel=0.05)
    found = coverage(fit, sets=200, seed=4)
    assert "Y13" not in found.names
    z = found.z[:, found.names.index("Y03")]
    assert 0.8 < z.std() < 1.2
    for level, covered in zip(LEVELS, found.covered, strict=True):
        assert np.all(np.abs(binomial(covered, level, 200)) < FAR)


def test_robust_fits_are_repeated_as_robust_fits():
    lines = campaign(np.random.default_rng(3), calibrated=False, factors=(1, 1, 1), shared=0, j_max=20)
    fit = fitted(lines, robust="huber")
    found = coverage(fit, sets=20, seed=1)
    assert found.sets == 20
    assert not np.array_equal(found.z, coverage(fitted(lines), sets=20, seed=1).z)


def test_the_executor_does_not_matter(fit):
    here = coverage(fit, sets=42, seed=5)
    told = []
    with ThreadPoolExecutor(2) as pool:
        threads = coverage(fit, sets=42, seed=5, executor=pool, progress=lambda *state: told.append(state))
    assert np.array_equal(here.z, threads.z)
    assert np.array_equal(here.noise, threads.noise)
    assert told[-1] == (42, 42) and len(told) == 3
    assert not np.array_equal(here.z, coverage(fit, sets=42, seed=6).z)


@pytest.mark.slow
def test_processes_give_the_same(fit):
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as pool:
        processes = coverage(fit, sets=21, seed=5, executor=pool)
    # Another process may sum in another order.
    np.testing.assert_allclose(processes.z, coverage(fit, sets=21, seed=5).z, atol=1e-6)


# --- simulated lines --------------------------------------------------------------------------------------


def test_simulated_lines_have_the_noise_and_the_shared_errors_of_the_fit(fit):
    """Means and covariances of 400 simulated lists, against the noise factors and priors they were drawn with."""
    calculated = fit.lines.position - fit.residuals
    count = len(fit.constants)
    # Without the calibration errors of the fit, which the simulated lists do not share.
    own = fit.design.rows.whitened[: len(fit.lines), count:] / fit.design.rows.scale[: len(fit.lines), None]
    calculated = calculated - (own @ fit.values[count:])[fit.design.row_of]
    rng = np.random.default_rng(7)
    errors = np.array([simulate_lines(fit, rng).position - calculated for _ in range(400)])
    for code in range(len(SOURCES)):
        of_source = fit.lines.source == code
        noise = SIGMA * fit.noise.factors[code]
        nu = fit.lines.position[of_source]
        shared = np.hypot(OFFSET_SIGMA, SCALE_SIGMA * nu)
        # A standard deviation of 400 draws is good to 3.5 %, the mean over 242 lines of it better.
        np.testing.assert_allclose(errors[:, of_source].std(axis=0).mean(), np.hypot(noise, shared).mean(), rtol=0.02)
        # The mean over the lines of a source keeps the shared errors and hardly any noise.
        mean = errors[:, of_source].mean(axis=1)
        expected = np.sqrt(OFFSET_SIGMA**2 + (SCALE_SIGMA * nu.mean()) ** 2 + noise**2 / of_source.sum())
        np.testing.assert_allclose(mean.std(), expected, rtol=0.15)


def test_lines_that_are_not_used_stay(fit):
    lines = fit.lines.excluded(fit.lines.row < 10, "left out")
    fit = fitted(lines)
    drawn = simulate_lines(fit, np.random.default_rng(1))
    assert np.array_equal(drawn.position[:9], lines.position[:9])
    assert np.all(drawn.position[9:] != lines.position[9:])
    assert drawn.reasons == lines.reasons and np.array_equal(drawn.exclusion, lines.exclusion)


def test_wrong_use(fit):
    with pytest.raises(UsageError, match="must be 1 or more"):
        coverage(fit, sets=0, seed=1)


def test_sets_that_cannot_be_fitted_are_counted_and_said(fit, monkeypatch):
    calls = iter(range(100))

    def sometimes(*arguments, **more):
        if next(calls) % 2:
            raise NotConverged("did not settle")
        return fit

    monkeypatch.setattr("dunhamfit.inference.simulate.fit_model", sometimes)
    found = coverage(fit, sets=10, seed=1)
    assert found.sets == 5
    assert found.failures == ("did not settle",) * 5
    calls = iter([1, 1, 1])
    with pytest.raises(NotConverged, match="none of 3 simulated sets"):
        coverage(fit, sets=3, seed=1)
