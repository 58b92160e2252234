"""Degrees of freedom of error bars, against the cases in which they are known."""

from __future__ import annotations

import numpy as np
import pytest
from reference.thirteen_terms import BANDS, ISOTOPOLOGUE, TERMS, campaign

from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.degrees import effective_degrees


def fitted(lines, *, policy, **more):
    return fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, policy=policy, **more)


def test_stated_uncertainties_are_known():
    assert np.isinf(effective_degrees(fitted(campaign(np.random.default_rng(1)), policy="stated"))).all()


def test_one_common_factor_has_what_is_left_of_the_lines():
    """n - p, as for any linear regression."""
    fit = fitted(campaign(np.random.default_rng(1), calibrated=False, j_max=12), policy="common")
    np.testing.assert_allclose(effective_degrees(fit), fit.statistics.dof, rtol=1e-10)


@pytest.mark.parametrize("ratio", [1.0, 3.0])
def test_two_sources_combine_as_welch_and_satterthwaite_say(ratio):
    """d = (sum v)^2 / sum (v^2 / d_g) for independent variances v (JCGM 100:2008, G.4.1).

    Two sources with the same transitions share in every constant as 1/f^2; with many more lines than
    parameters their variances are independent up to terms of p/n, here 13/242.
    """
    bands = [(source, upper, lower) for source in (0, 1) for _, upper, lower in BANDS]
    lines = campaign(np.random.default_rng(2), factors=(1, ratio, 1), bands=bands, shared=0, calibrated=False)
    fit = fitted(lines, policy="per-source")
    weights = 1 / fit.noise.factors**2
    share = weights / weights.sum()
    expected = 1 / np.sum(share**2 / fit.noise.degrees)
    np.testing.assert_allclose(effective_degrees(fit), expected, rtol=0.1)


def test_a_constant_that_is_fixed_and_one_that_a_prior_rules():
    lines = campaign(np.random.default_rng(3), calibrated=False)
    fit = fitted(lines, policy="per-source", priors={"Y13": Prior(-1e-15, 0.0), "Y03": Prior(-2e-14, 1e-20)})
    degrees = effective_degrees(fit)
    assert np.isinf(degrees[fit.index(1, 3)])
    assert degrees[fit.index(0, 3)] > 1e6
    assert degrees[fit.index(1, 0)] < fit.statistics.lines


def test_a_factor_that_the_lines_do_not_tell_counts_as_known():
    lines = campaign(np.random.default_rng(4), calibrated=False)
    mask = lines.source == 0
    mask[np.flatnonzero(mask)[:2]] = False
    lines = lines.excluded(mask, "left out")
    fit = fitted(lines, policy="per-source")
    assert list(fit.noise.determined) == [False, True, True]
    found = effective_degrees(fit)
    # What the two lines bring is known, what the others bring is not: more degrees than without them, but not infinite.
    other = effective_degrees(fitted(lines.excluded(lines.source == 0, "left out"), policy="per-source"))
    assert np.all(np.isfinite(found)) and np.all(found > 0.99 * other)
