"""Fits to real lines of carbon monoxide, against an 80-digit solution and against published constants."""

from __future__ import annotations

import numpy as np
import pytest
from reference.carbon_monoxide import (
    FUNDAMENTAL_LINES,
    FUNDAMENTAL_SIGMA,
    GEORGE_1994,
    ROTATION_B0_MHZ,
    ROTATION_B0_SIGMA,
    ROTATION_D0_MHZ,
    ROTATION_D0_SIGMA,
    ROTATION_MHZ,
)
from reference.exact_fit import distance_in_sigma, exact_fit

from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.design import calculate
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.masses import ELECTRON_MASS_U
from dunhamfit.molecule.terms import TermSet
from dunhamfit.units import sigma_to_wavenumber, to_wavenumber

TO_V5 = TermSet.from_orders([5, 4, 3, 2, 1])
TO_V7 = TermSet.from_orders([7, 5, 4, 3, 1])
BREAKDOWN = {"C": ["10", "01"], "O": ["10", "01"]}


def assert_exact(fit, lines):
    """The project's promise: 1e-6 of its own sigma for a constant; nine digits for a sigma."""
    values, sigmas = exact_fit(fit.model, lines)
    count = len(fit.constants)
    assert distance_in_sigma(fit.values[:count], values, sigmas).max() < 1e-6
    np.testing.assert_allclose(fit.sigmas[:count], [float(s) for s in sigmas], rtol=1e-9)


def test_24_terms_agree_with_80_digits(main_isotopologue):
    fit = fit_lines(main_isotopologue, TO_V7, reference="12C16O")
    assert (fit.statistics.lines, fit.statistics.parameters) == (1344, 24)
    assert_exact(fit, main_isotopologue)


def test_six_isotopologues_agree_with_80_digits(carbon_monoxide):
    lines = carbon_monoxide.excluded(carbon_monoxide.v_upper > 5, "v above 5")
    fit = fit_lines(lines, TO_V5, reference="12C16O", breakdown=BREAKDOWN)
    assert len(np.unique(lines.isotopologue[lines.used])) == 6
    assert_exact(fit, lines)


def test_constants_are_those_of_the_molecule(up_to_v5):
    """Y10 and Y01 as T. George et al., J. Mol. Spectrosc. 165, 500 (1994), to what decades as sigma allow."""
    fit = fit_lines(up_to_v5, TO_V5, reference="12C16O")
    assert fit.value(0, 1) == pytest.approx(1.93128090, abs=2e-7)
    assert fit.value(1, 0) == pytest.approx(2169.81272, abs=1e-3)


@pytest.mark.parametrize(("term", "within"), [((1, 0), 2e-5), ((2, 0), 3e-5), ((0, 1), 2e-8), ((1, 1), 6e-8)])
def test_noise_factors_by_band_bring_the_published_constants(up_to_v5, term, within):
    """The decades of the uncertainty codes are far from the scatter; with a factor for each band the precise
    bands rule, as they do in T. George et al., J. Mol. Spectrosc. 165, 500 (1994)."""
    fit = fit_lines(up_to_v5, TO_V5, reference="12C16O", policy="per-band")
    assert fit.value(*term) == pytest.approx(GEORGE_1994[term], abs=within)


def test_breakdown_terms_are_those_of_the_molecule(carbon_monoxide):
    """Delta_kl near 0.70 and -0.17 for (1, 0), near -2.06 and -2.12 for (0, 1), of C and O:
    R. Farrenq et al., J. Mol. Spectrosc. 149, 375 (1991)."""
    lines = carbon_monoxide.excluded(carbon_monoxide.v_upper > 5, "v above 5")
    fit = fit_lines(lines, TO_V5, reference="12C16O", breakdown=BREAKDOWN)
    mass = dict(zip(fit.model.reference.elements, fit.model.reference.masses, strict=True))

    def delta(k, l, atom):
        independent = fit.value(k, l) - sum(fit.value(k, l, each) for each in mass)
        return fit.value(k, l, atom) * float(mass[atom].value / ELECTRON_MASS_U) / independent

    assert -2.3 < delta(0, 1, "C") < -1.6
    assert -2.3 < delta(0, 1, "O") < -1.6
    assert 0.6 < delta(1, 0, "C") < 0.8
    assert -0.25 < delta(1, 0, "O") < -0.08


def test_nine_terms_on_eight_levels_are_refused(main_isotopologue):
    with pytest.raises(CannotDetermine) as refusal:
        fit_lines(main_isotopologue, TermSet.from_orders([9, 5, 4, 3, 1]), reference="12C16O")
    assert refusal.value.terms == ("Y80", "Y90")
    assert refusal.value.exit_code == 4
    assert str(refusal.value) == (
        "the data cannot determine the model:\n"
        "Y80 and Y90: 9 terms with l = 0 need as many independent differences between vibrational levels; the "
        "lines reach 8 vibrational levels (v = 0-7), which makes 7. Add bands that reach or join more vibrational "
        "levels, or ask for at most Y70."
    )


def short_list(v_upper, j_upper, j_lower, position, sigma, source="table") -> LineList:
    zero = np.zeros(len(position), dtype=int)
    return LineList(
        position=position,
        sigma=sigma,
        v_upper=zero + v_upper,
        j_upper=j_upper,
        v_lower=zero,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, len(position) + 1),
        exclusion=zero,
        isotopologues=("12C16O",),
        sources=(Source(source),),
    )


def test_pure_rotation_gives_the_published_constants():
    """G. Winnewisser et al., J. Mol. Spectrosc. 184, 468 (1997): B_0, D_0 and H_0 of their eight best lines."""
    j, frequency, sigma = (np.array(column) for column in zip(*ROTATION_MHZ, strict=True))
    position = to_wavenumber(frequency, "MHz")
    lines = short_list(0, j, j - 1, position, sigma_to_wavenumber(sigma, frequency, "MHz"))
    fit = fit_lines(lines, TermSet([(0, 1), (0, 2), (0, 3)]), reference="12C16O")
    mhz = 29979.2458
    # Within half a unit of the last digit given.
    assert fit.value(0, 1) * mhz == pytest.approx(ROTATION_B0_MHZ, abs=5e-7)
    assert fit.sigma(0, 1) * mhz == pytest.approx(ROTATION_B0_SIGMA, abs=5e-7)
    assert -fit.value(0, 2) * mhz == pytest.approx(ROTATION_D0_MHZ, abs=5e-7)
    assert fit.sigma(0, 2) * mhz == pytest.approx(ROTATION_D0_SIGMA, abs=5e-7)


def test_the_fit_predicts_frequency_standards(up_to_v5):
    """A. Maki, CRC Handbook: eight lines of 1-0 to 1e-6 cm-1 (two sigma), which the list matches to 2e-6 cm-1."""
    fit = fit_lines(up_to_v5, TO_V5, reference="12C16O", policy="per-band")
    branch, j_lower, position = (np.array(column) for column in zip(*FUNDAMENTAL_LINES, strict=True))
    j_upper = j_lower + np.where(branch == "R", 1, -1)
    standards = short_list(1, j_upper, j_lower, position, np.full(8, FUNDAMENTAL_SIGMA))
    calculated = calculate(fit.model, standards, fit.values)
    assert np.abs(calculated.high - position).max() < 5e-6


def test_the_fit_reproduces_rotational_frequencies(up_to_v5):
    """Rotational lines of Winnewisser et al. (1997) from the global fit, to 1e-6 cm-1 (30 kHz)."""
    fit = fit_lines(up_to_v5, TO_V5, reference="12C16O", policy="per-band")
    j, frequency, _ = (np.array(column) for column in zip(*ROTATION_MHZ, strict=True))
    position = to_wavenumber(frequency, "MHz")
    calculated = calculate(fit.model, short_list(0, j, j - 1, position, np.full(8, 1e-7)), fit.values)
    assert np.abs(calculated.high - position).max() < 1e-6
