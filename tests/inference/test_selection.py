"""Sets of terms: judged from triangles as full fits judge them, and the true set found.

What comes from triangles is compared with fits of the same lines; chi2, BIC and left-out
predictions are compared with numpy on rows written out here. The campaign is invented
(`tests/reference/thirteen_terms.py`) and is simulated without the code under test.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines, make_model
from dunhamfit.inference.selection import LEAST_T, NEAR_BIC, PLAIN_BIC, compare_sets, near_equal_weights, select_terms
from dunhamfit.inference.widest import widest_fit
from dunhamfit.molecule.terms import TermSet
from dunhamfit.results.near_equal import near_equal_sets
from dunhamfit.results.predict import predict
from tests.reference.thirteen_terms import ISOTOPOLOGUE, TERMS, campaign, energy

# Far enough in J that every true term is more than 10 sigma from zero: others cannot be found by anybody.
J_FAR = 100


def lines_of(seed: int, **changes):
    return campaign(np.random.default_rng([21, seed]), **({"j_max": J_FAR} | changes))


@pytest.fixture(scope="module")
def plain():
    """Lines whose stated uncertainties are right, without shared errors."""
    return lines_of(0, shared=0.0, calibrated=False, factors=(1.0, 1.0, 1.0))


@pytest.fixture(scope="module")
def selection(plain):
    return select_terms(plain, reference=ISOTOPOLOGUE)


def test_every_candidate_is_what_a_fit_of_its_terms_gives(plain, selection):
    for item in selection.candidates:
        fit = fit_lines(plain, item.terms, reference=ISOTOPOLOGUE)
        # Sets without Y20 or Y11 leave residuals of 1e9 sigma, known to eps of that.
        loose = 1e-9 * np.sqrt(item.reduced_chi2) + 1e-6
        assert item.values == pytest.approx(fit.values, rel=1e-7, abs=loose * fit.sigmas.max())
        assert np.all(np.abs(item.values - fit.values) < loose * fit.sigmas)
        assert item.sigmas == pytest.approx(fit.sigmas, rel=1e-7)
        stats = fit.statistics
        assert item.chi2 == pytest.approx(stats.chi2, rel=1e-8)
        assert item.reduced_chi2 == pytest.approx(stats.reduced_chi2, rel=1e-8)
        assert (item.aicc, item.bic) == pytest.approx((stats.aicc, stats.bic), rel=1e-8)
        assert item.condition == pytest.approx(stats.condition, rel=1e-6)


def test_left_out_bands_are_what_fits_without_them_predict(plain, selection):
    item = selection.recommended
    for index, name in enumerate(selection.bands):
        upper, lower = map(int, name.split()[1].split("-"))
        band = (plain.v_upper == upper) & (plain.v_lower == lower)
        try:
            other = fit_lines(plain.excluded(band, "left out"), item.terms, reference=ISOTOPOLOGUE)
        except CannotDetermine:
            assert item.left_out[index] == np.inf
            assert item.log_predictive[index] == -np.inf
            continue
        residual = (other.residuals / plain.sigma)[band]
        assert item.left_out[index] == pytest.approx(residual @ residual, rel=1e-5)
        # Multivariate normal density of the band, its own scatter and the error bars of the prediction together.
        whole = fit_lines(plain, item.terms, reference=ISOTOPOLOGUE)
        # Rows stand in the order of transitions, residuals in that of lines.
        order = whole.design.used[np.argsort(whole.design.row_of)]
        rows = whole.design.rows.whitened[band[order]]
        spread = np.eye(len(rows)) + (rows @ other.factor) @ (rows @ other.factor).T
        residual = (other.residuals / plain.sigma)[order[band[order]]]
        expected = -0.5 * (residual @ np.linalg.solve(spread, residual) + np.linalg.slogdet(spread)[1])
        assert item.log_predictive[index] == pytest.approx(expected, rel=1e-5)


def test_the_error_of_left_out_bands_is_their_root_mean_square(selection):
    for item in selection.candidates:
        told = np.isfinite(item.left_out)
        if told.all():
            mean = item.left_out.sum() / selection.wide.statistics.lines
            assert item.left_out_error == pytest.approx(np.sqrt(mean))


def test_the_recommendation_follows_its_rule(selection):
    lowest = min(item.bic for item in selection.candidates)
    near = [item for item in selection.candidates if item.bic <= lowest + NEAR_BIC]
    assert {id(item) for item in near} == {id(item) for item in selection.near_equal}
    sure = [item for item in near if item.smallest_t >= LEAST_T]
    fine = [item for item in sure if item.bic <= min(each.bic for each in sure) + PLAIN_BIC]
    assert selection.recommended in fine
    assert selection.recommended.parameters == min(item.parameters for item in fine)
    assert "smallest" in selection.reason


def test_candidates_are_staircases(selection):
    for item in selection.candidates:
        orders = item.terms.orders
        assert item.terms == TermSet.from_orders(orders)
        assert all(first >= second for first, second in pairwise(orders))


def test_shares_sum_to_one_and_favour_what_predicts(selection):
    assert selection.weights.sum() == pytest.approx(1.0)
    first = selection.near_equal[0]
    worse = replace(first, log_predictive=first.log_predictive - 50.0)
    assert near_equal_weights((first, worse)) == pytest.approx([1.0, 0.0], abs=1e-9)
    assert near_equal_weights((first, first)) == pytest.approx([0.5, 0.5])


@pytest.mark.slow
def test_the_true_set_is_recommended():
    """200 campaigns with noise factors and shared errors by source: required are 90 % among the near-equal sets."""
    near = recommended = 0
    for seed in range(200):
        found = select_terms(lines_of(seed), reference=ISOTOPOLOGUE, policy="per-source")
        near += any(item.terms == TERMS for item in found.near_equal)
        recommended += found.recommended.terms == TERMS
    assert near >= 180
    assert recommended >= 180


@pytest.mark.parametrize("orders", [[3, 3, 2, 1], [4, 3, 2]], ids=["without Y40", "without Y03 and Y13"])
def test_predictions_of_a_fit_that_lacks_a_term_are_covered(orders):
    """Far bands (8-7) and far J: off by many quoted sigma, and within 3 with the model's part."""
    lines = lines_of(3, shared=0.0, calibrated=False, factors=(1.0, 1.0, 1.0), j_max=60)
    if orders == [4, 3, 2]:
        lines = lines_of(3, shared=0.0, calibrated=False, factors=(1.0, 1.0, 1.0))
    fit = fit_lines(lines, TermSet.from_orders(orders), reference=ISOTOPOLOGUE)
    sets = near_equal_sets(fit)
    upper, lower, j_min, j_max = (8, 7, 0, 60) if orders[0] == 3 else (1, 0, 100, 120)
    bare = predict(fit, v_upper=upper, v_lower=lower, j_max=j_max)
    full = predict(fit, v_upper=upper, v_lower=lower, j_max=j_max, selection=sets)
    far = bare.j_lower >= j_min
    error = np.abs(bare.position - energy(upper, bare.j_upper) + energy(lower, bare.j_lower))[far]
    assert (error / bare.sigma[far]).max() > 30
    assert (error / full.sigma[far]).max() < 3


def test_a_term_that_is_given_stays_in_every_set(plain):
    """A value with an uncertainty, and a fixed one beyond the staircase."""
    priors = {"Y03": Prior(-2e-14, 1e-15), "Y04": Prior(-1e-22, 0.0)}
    found = select_terms(plain, reference=ISOTOPOLOGUE, priors=priors)
    assert all({"Y03", "Y04"} <= set(item.terms.names) for item in found.candidates)
    names = found.wide.model.names
    assert all("Y04" not in [names[i] for i in item.columns] for item in found.candidates)
    best = fit_lines(plain, found.recommended.terms, reference=ISOTOPOLOGUE, priors=priors)
    assert found.recommended.bic == pytest.approx(best.statistics.bic, rel=1e-8)


def test_nothing_is_offered_that_the_lines_cannot_tell():
    """v = 0 to 4: at most Y40 (four independent differences)."""
    lines = lines_of(0)
    found = select_terms(lines, reference=ISOTOPOLOGUE)
    assert max(item.terms.orders[0] for item in found.candidates) == 4
    for item in found.candidates:
        assert np.isfinite(item.sigmas).all() and item.condition < 1e8


def test_the_widest_set_is_bounded_by_request(plain):
    model = make_model(plain, TermSet.from_orders([1, 0]), reference=ISOTOPOLOGUE)
    wide = widest_fit(model, plain, policy="stated", orders=(3, 2))
    assert wide.model.terms == TermSet.from_orders([3, 2])
    assert compare_sets(wide).candidates[-1].terms == wide.model.terms


def test_breakdown_without_isotopes_is_refused(plain):
    with pytest.raises(CannotDetermine, match="same isotope"):
        select_terms(plain, reference=ISOTOPOLOGUE, breakdown={"Si": ["10"]})
