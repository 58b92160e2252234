"""Autocorrelation times and the agreement of ensembles, on series whose properties are known."""

from __future__ import annotations

import numpy as np
import pytest
from emcee.autocorr import integrated_time

from dunhamfit.inference.convergence import autocorrelation_times, diagnose, steps_to_discard, steps_wanted


def autoregressive(rng, phi, shape):
    """x_t = phi x_(t-1) + e_t along the first axis, started in its stationary law of unit variance."""
    series = rng.standard_normal(shape)
    for step in range(1, shape[0]):
        series[step] = phi * series[step - 1] + np.sqrt(1 - phi**2) * series[step]
    return series


@pytest.mark.parametrize("phi", [0.0, 0.5, 0.9])
def test_autocorrelation_time_of_an_autoregressive_series(rng, phi):
    """1 + 2 sum phi^k = (1 + phi)/(1 - phi) (common practice); 5 % is three times the scatter at this length."""
    draws = autoregressive(rng, phi, (4000, 4, 16, 1))
    assert autocorrelation_times(draws)[0] == pytest.approx((1 + phi) / (1 - phi), rel=0.05)


def test_autocorrelation_time_is_that_of_emcee(rng):
    """emcee takes each walker about its own mean, which takes 2 window/steps off its estimate: 0.7 % here."""
    draws = autoregressive(rng, 0.7, (8000, 1, 16, 2))
    assert autocorrelation_times(draws) == pytest.approx(integrated_time(draws[:, 0]), rel=0.01)


def test_stuck_walkers_have_not_forgotten_anything(rng):
    """Walkers that sit in different places mix well about their own means, which must not count."""
    draws = 0.1 * rng.standard_normal((500, 4, 16, 1)) + rng.standard_normal((4, 16, 1))
    found = diagnose(draws)
    assert found.tau[0] > 50 and not found.converged


def test_monte_carlo_error_covers_the_mean(rng):
    """The mean of a series of known mean lies within its standard error as often as it should."""
    deviations = []
    for _ in range(100):
        draws = autoregressive(rng, 0.6, (300, 4, 4, 1))
        deviations.append(draws.mean() / diagnose(draws).mcse[0])
    # rms of 100 unit deviates: 1 +- 0.07; three of those
    assert np.sqrt(np.mean(np.square(deviations))) == pytest.approx(1.0, abs=0.21)


def test_ensembles_that_agree_are_said_to_agree(rng):
    """One false alarm in a thousand is meant: among 100 chains of 5 quantities more than 2 would be odd (0.02 %)."""
    verdicts = [diagnose(autoregressive(rng, 0.5, (300, 4, 4, 5))).agree for _ in range(100)]
    assert verdicts.count(False) <= 2


def test_an_ensemble_that_differs_is_found(rng):
    draws = autoregressive(rng, 0.5, (500, 4, 8, 2))
    draws[:, 2, :, 1] += 0.3
    found = diagnose(draws)
    assert not found.agree and not found.converged
    assert np.argmax(found.disagreement) == 1


def test_walkers_of_one_ensemble_are_never_compared(rng):
    """A single ensemble gives no statement on agreement, however its walkers differ."""
    assert np.isnan(diagnose(autoregressive(rng, 0.5, (500, 1, 8, 1))).disagreement[0])


def test_length_wanted_and_steps_discarded(rng):
    assert steps_wanted(np.array([2.0, 4.0]), ess=1000, walkers=10) == 400
    assert steps_wanted(np.array([2.0, 4.0]), ess=1000, walkers=1000) == 200
    draws = autoregressive(rng, 0.9, (2000, 4, 8, 1))
    assert steps_to_discard(draws, 1000) == 0
    # 10 tau - 10 = 180, and 15 % for the scatter of tau in a series this short.
    assert 153 < steps_to_discard(draws, 10) < 207
    assert steps_to_discard(draws[:100], 0) <= 50
