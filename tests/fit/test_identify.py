"""What the lines cannot determine is refused by name, with the data that would fix it; never a NaN."""

from __future__ import annotations

import numpy as np
import pytest
from simulated import REFERENCE, TERMS, band, campaign, noisy, with_columns

from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.line_list import Source, merge
from dunhamfit.molecule.terms import TermSet

TWO = TermSet([(1, 0), (0, 1)])


def bands(*names, **options):
    return merge([band(name, **options) for name in names])


def refusal(lines, terms, **options) -> CannotDetermine:
    with pytest.raises(CannotDetermine) as caught:
        fit_lines(noisy(lines, 1), terms, reference=REFERENCE, **options)
    text = str(caught.value)
    assert "nan" not in text.lower()
    assert "e+" not in text
    assert caught.value.exit_code == 4
    return caught.value


def test_y50_with_five_levels():
    found = refusal(bands("1-0", "2-1", "3-2", "4-3"), TermSet.from_orders([5, 2, 1]))
    assert found.terms == ("Y50",)
    assert str(found) == (
        "the data cannot determine the model:\n"
        "Y50: 5 terms with l = 0 need as many independent differences between vibrational levels; the lines reach "
        "5 vibrational levels (v = 0-4), which makes 4. Add bands that reach or join more vibrational levels, or "
        "ask for at most Y40."
    )


def test_breakdown_of_an_atom_with_one_isotope():
    lines = merge([band("1-0"), band("2-1"), band("1-0", isotopologue="29Si32S")])
    found = refusal(lines, TERMS, breakdown={"S": ["10", "01"]})
    assert found.terms == ("d10_S", "d01_S")
    assert str(found) == (
        "the data cannot determine the model:\n"
        "d10_S and d01_S: every line has the same isotope 32S of S, and a breakdown term shows only in the "
        "difference between isotopes; add lines of an isotopologue with another isotope of S, or remove the "
        "breakdown terms of S."
    )


def test_a_free_scale_on_every_source():
    lines = merge(
        [
            band("1-0", source=Source("grating", scale=np.inf)),
            band("2-1", source=Source("diode", scale=np.inf)),
        ]
    )
    found = refusal(lines, TERMS)
    assert found.terms == ("scale[grating]", "scale[diode]")
    assert str(found) == (
        "the data cannot determine the model:\n"
        "scale[grating] and scale[diode]: a free scale on every source only multiplies all constants by a common "
        "factor; give at least one source a scale with a stated uncertainty, or none."
    )


def test_the_three_refusals_can_come_together():
    source = Source("grating", scale=np.inf)
    lines = bands("1-0", "2-1", source=source)
    found = refusal(lines, TermSet.from_orders([3, 1]), breakdown={"S": ["10"]})
    assert found.terms == ("d10_S", "Y30", "scale[grating]")
    assert str(found).count("\n") == 3


def test_rotational_terms_need_levels_too():
    found = refusal(bands("1-0"), TermSet([(1, 0), (0, 1), (1, 1), (2, 1)]))
    assert found.terms == ("Y21",)
    assert str(found) == (
        "the data cannot determine the model:\n"
        "Y21: 3 terms with l = 1 need as many vibrational levels; the lines reach 2 (v = 0 and 1). Add bands that "
        "reach other vibrational levels, or ask for at most Y11."
    )


def test_pure_rotation_has_no_vibrational_term():
    found = refusal(bands("0-0"), TWO)
    assert found.terms == ("Y10",)
    assert "the lines reach 1 vibrational level (v = 0), which makes 0" in str(found)
    assert "or ask for no term with l = 0" in str(found)


def test_bands_that_share_no_level_count_by_themselves():
    found = refusal(bands("1-0", "5-4"), TermSet([(1, 0), (2, 0), (3, 0), (0, 1)]))
    assert found.terms == ("Y30",)
    assert "(v = 0, 1, 4 and 5), and those of v = 4 and 5 share no level with the rest, which makes 2" in str(
        found
    )


def test_floating_bands_are_a_warning_where_the_form_of_the_model_ties_them():
    fit = fit_lines(noisy(bands("1-0", "2-1", "6-5"), 1), TERMS, reference=REFERENCE)
    assert fit.warnings == (
        "bands 6-5 share no vibrational level with the rest: only the form of the model, and no line, ties them "
        "to it",
    )
    assert fit_lines(noisy(bands("1-0", "2-1", "2-0"), 1), TERMS, reference=REFERENCE).warnings == ()


def test_fewer_lines_than_terms():
    lines = band("1-0", j_max=1)  # R(0), R(1), P(1)
    found = refusal(lines, TermSet([(1, 0), (0, 1), (1, 1), (0, 2)]))
    assert found.terms == ("Y10", "Y01", "Y11", "Y02")
    assert str(found) == (
        "the data cannot determine the model:\n4 terms, 3 independent lines; add lines, or ask for fewer terms."
    )


def test_repeats_are_not_independent_lines():
    one = band("1-0", j_max=1)
    found = refusal(
        merge([one, with_columns(one, row=one.row + 100)]), TermSet([(1, 0), (0, 1), (1, 1), (0, 2)])
    )
    assert "4 terms, 3 independent lines" in str(found)


def test_what_counting_cannot_see_is_found_by_rank():
    """All lines between J = 4 and 5: the terms with l = 1 and 2 are the same up to a factor."""
    lines = bands("1-0", "2-0")
    between = lines.subset(np.flatnonzero(lines.j_lower + lines.j_upper == 9))
    found = refusal(between, TermSet([(1, 0), (0, 1), (0, 2)]))
    assert found.terms == ("Y02",)
    assert str(found) == (
        "the data cannot determine Y02: every line can be reproduced as well by a change of Y01 instead. "
        "What would fix it: lines of higher J in more bands; or remove Y02."
    )
    assert found.condition == np.inf


def test_breakdown_of_lines_that_all_differ_from_the_reference():
    """One isotopologue only, which is not the reference: pure mass scaling and breakdown are one."""
    lines = band("1-0", isotopologue="29Si32S")
    found = refusal(lines, TWO, breakdown={"Si": ["10"]})
    assert found.terms == ("d10_Si",)
    assert (
        "a change of Y10 instead. What would fix it: lines of isotopologues that differ in Si alone"
        in str(found)
    )


def test_a_prior_makes_up_for_missing_lines():
    lines = noisy(bands("1-0", "2-1", "3-2", "4-3"), 1)
    terms = TermSet.from_orders([5, 2, 1])
    fit = fit_lines(lines, terms, reference=REFERENCE, priors={"Y50": Prior(0.0, 1e-6)})
    assert fit.sigma(5, 0) == pytest.approx(1e-6, rel=1e-6)
    assert np.all(np.isfinite(fit.sigmas))
    fixed = fit_lines(lines, terms, reference=REFERENCE, priors={"Y50": Prior(0.0, 0.0)})
    assert fixed.sigma(5, 0) == 0.0


def test_one_scale_with_a_stated_uncertainty_is_enough():
    lines = merge(
        [band("1-0", source=Source("grating", scale=np.inf)), band("2-1", source=Source("diode", scale=1e-8))]
    )
    fit = fit_lines(noisy(lines, 1), TERMS, reference=REFERENCE)
    assert np.all(np.isfinite(fit.sigmas))
    assert fit.sigmas[fit.model.names.index("scale[grating]")] > 0


def test_nothing_but_numbers_ever_comes_out():
    fit = fit_lines(noisy(campaign(), 1), TERMS, reference=REFERENCE)
    assert np.all(np.isfinite(fit.values)) and np.all(fit.sigmas > 0)
    assert np.isfinite(fit.statistics.condition)
