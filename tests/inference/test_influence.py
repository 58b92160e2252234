"""Shares of sources in the constants, against closed forms and actual refits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from reference.thirteen_terms import ISOTOPOLOGUE, SCALE_SIGMA, SOURCES, TERMS, campaign

from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.influence import PRIORS, calibration_share, influence
from dunhamfit.lines.line_list import line_columns


def fitted(lines, *, policy="stated", **more):
    return fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, policy=policy, **more)


@pytest.fixture(scope="module")
def fit():
    return fitted(campaign(np.random.default_rng(21)), policy="per-source")


def by_two_sources(ratio: float):
    """The same transitions by two sources, the second with `ratio` times the uncertainty of the first."""
    first = campaign(np.random.default_rng(1), factors=(1, 1, 1), shared=0, calibrated=False)
    columns = {item.name: np.concatenate([getattr(first, item.name)] * 2) for item in line_columns()}
    columns["source"] = np.repeat([0, 1], len(first))
    columns["sigma"] = np.concatenate([first.sigma, ratio * first.sigma])
    return replace(first, **columns)


@pytest.mark.parametrize("ratio", [1.0, 2.0, 5.0])
def test_shares_of_two_sources_are_the_weights_of_a_weighted_mean(ratio):
    """w_1/(w_1 + w_2) with w = 1/sigma^2, for every constant (JCGM 100:2008, 5.1.2, for a weighted mean)."""
    shares = influence(fitted(by_two_sources(ratio))).shares
    np.testing.assert_allclose(shares[0], ratio**2 / (1 + ratio**2), rtol=1e-9)


@pytest.mark.parametrize("by", ["source", "band"])
def test_shares_are_positive_and_sum_to_one(fit, by):
    found = influence(fit, by)
    assert found.labels[-1] == PRIORS
    assert np.all(found.shares >= 0)
    # Sums of a few dozen rounded terms.
    np.testing.assert_allclose(found.shares.sum(axis=0), 1.0, rtol=1e-12)


def test_a_constant_that_is_fixed_has_no_shares():
    fit = fitted(campaign(np.random.default_rng(3)), priors={"Y13": Prior(-1e-15, 0.0)})
    found = influence(fit)
    assert not found.shares[:, fit.index(1, 3)].any()
    np.testing.assert_allclose(found.shares[:, fit.index(1, 0)].sum(), 1.0)


def test_a_share_is_the_change_of_the_variance_with_the_noise_of_the_source():
    """d ln C_jj / d ln f_g^2, from actual fits with the noise of one source changed by a thousandth."""
    lines = campaign(np.random.default_rng(4), factors=(1, 1, 1))
    shares = influence(fitted(lines)).shares
    for code in range(len(SOURCES)):
        step = 1e-3
        up, down = (
            fitted(replace(lines, sigma=lines.sigma * np.where(lines.source == code, np.exp(sign * step / 2), 1.0)))
            for sign in (1, -1)
        )
        count = len(up.constants)
        slope = (np.log(up.sigmas[:count] ** 2) - np.log(down.sigmas[:count] ** 2)) / (2 * step)
        # Third order of the step, and rounding of 1e-10 over it.
        np.testing.assert_allclose(slope, shares[code], atol=1e-5)


def test_dropped_sources_come_along(fit):
    found = influence(fit)
    assert [item.label for item in found.dropped] == list(SOURCES)


def test_calibration_share_is_what_is_gone_when_calibration_is_known():
    """sqrt(C_jj - C_jj(known)), the second from an actual fit in which offsets and scales are fixed."""
    lines = campaign(np.random.default_rng(6))
    fit = fitted(lines)
    known = fitted(replace(lines, sources=tuple(replace(s, offset=0.0, scale=0.0) for s in lines.sources)))
    count = len(fit.constants)
    variances = fit.sigmas[:count] ** 2
    expected = (variances - known.sigmas[:count] ** 2) / variances
    # Sigmas are good to 1e-9, and the difference of their squares to that of the larger one.
    np.testing.assert_allclose(calibration_share(fit)[:count] ** 2 / variances, expected, atol=1e-8)
    np.testing.assert_allclose(calibration_share(fit)[count:], fit.sigmas[count:], rtol=1e-9)


def test_shared_errors_that_rule_everything_are_seen():
    """Lines a thousand times better than the shared errors: sigma is all calibration."""
    lines = campaign(np.random.default_rng(6))
    fit = fitted(replace(lines, sigma=lines.sigma * 1e-5))
    share = calibration_share(fit)[fit.index(1, 0)] / fit.sigma(1, 0)
    assert share > 0.999
    # Three scales known to 5e-8 leave Y10 = 760 cm-1 uncertain by that over the root of three at the least.
    assert fit.sigma(1, 0) > 760 * SCALE_SIGMA / np.sqrt(len(SOURCES))


def test_no_calibration_terms_no_share():
    fit = fitted(campaign(np.random.default_rng(6), calibrated=False))
    assert not calibration_share(fit).any()


@pytest.mark.parametrize(
    ("kind", "named"),
    [("scale", {f"scale[{name}]" for name in SOURCES}), ("offset", {f"offset[{SOURCES[2]}]"})],
)
def test_calibration_that_constants_could_take_over_is_refused_by_name(kind, named):
    """A free scale on every source multiplies all constants; free offsets on all are made up for by Y10."""
    lines = campaign(np.random.default_rng(6))
    free = tuple(replace(source, **{kind: np.inf}) for source in lines.sources)
    with pytest.raises(CannotDetermine) as refusal:
        fitted(replace(lines, sources=free))
    assert set(refusal.value.terms) == named
    one_known = (lines.sources[0], *free[1:])
    assert fitted(replace(lines, sources=one_known)).sigma(1, 0) > 0


def test_wrong_use(fit):
    with pytest.raises(UsageError, match="by 'band' or by 'source'"):
        influence(fit, "line")
