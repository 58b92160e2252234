"""Names, reduced masses and scaling factors of isotopologues."""

from __future__ import annotations

from decimal import Decimal, localcontext

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.errors import UsageError
from dunhamfit.molecule.isotopologue import DIGITS, Isotopologue, breakdown_factor, charge_text, mass_ratio
from dunhamfit.molecule.masses import ELECTRON_MASS_U, Masses

AME = Masses.ame2020()
nuclides = st.sampled_from(sorted(AME))
charges = st.integers(min_value=-3, max_value=3)


def parse(name: str, masses: Masses = AME) -> Isotopologue:
    return Isotopologue.parse(name, masses)


@given(nuclides, nuclides, charges)
def test_a_formula_reads_back(first, second, charge):
    made = Isotopologue("any", (first, second), (AME[first], AME[second]), charge)
    again = parse(made.formula)
    assert (again.nuclides, again.masses, again.charge) == (made.nuclides, made.masses, charge)
    assert again.formula == made.formula == again.name


@given(nuclides, nuclides, charges)
def test_reduced_mass_is_the_product_over_the_mass_of_the_molecule(first, second, charge):
    molecule = parse(f"{first}{second}{charge_text(charge)}")
    with localcontext(prec=2 * DIGITS):
        a, b = AME[first].value, AME[second].value
        # Watson 1980: the denominator is the mass of the ion itself, electrons counted.
        expected = a * b / (a + b - charge * ELECTRON_MASS_U)
        assert abs(molecule.mu_exact / expected - 1) < Decimal(10) ** (2 - DIGITS)
    assert molecule.mu == pytest.approx(float(expected), rel=1e-15)
    assert parse(f"{second}{first}{charge_text(charge)}").mu_exact == molecule.mu_exact


@given(nuclides, nuclides, charges)
def test_mass_gradient_is_the_derivative(first, second, charge):
    step = Decimal("1e-9")

    def log_mu(shift_first, shift_second):
        moved = AME.with_own({first: (AME[first].value + shift_first, 0)})
        masses = (moved[first], AME.with_own({second: (AME[second].value + shift_second, 0)})[second])
        return Isotopologue("x", (first, second), masses, charge).mu_exact.ln()

    with localcontext(prec=DIGITS):
        numbers = [
            (log_mu(step, 0) - log_mu(-step, 0)) / (2 * step),
            (log_mu(0, step) - log_mu(0, -step)) / (2 * step),
        ]
    # Central difference: error of order step^2.
    assert parse(f"{first}{second}{charge_text(charge)}").mu_gradient == pytest.approx(
        [float(x) for x in numbers], rel=1e-13
    )


def test_two_atoms_of_one_nuclide_err_together():
    masses = AME.with_own({"40Ar": ("39.9623831220", 1e-6)})
    # mu = M/2 for a homonuclear molecule, so sigma(mu) = sigma(M)/2.
    assert parse("40Ar40Ar", masses).mu_sigma == pytest.approx(0.5e-6, rel=1e-9)
    assert parse("12C12C").mu_sigma == 0.0


@pytest.mark.parametrize(
    ("name", "formula", "elements", "charge"),
    [
        ("13C16O", "13C16O", ("C", "O"), 0),
        ("12C1H+", "12C1H+", ("C", "H"), 1),
        ("H35Cl", "1H35Cl", ("H", "Cl"), 0),
        ("D35Cl", "2H35Cl", ("H", "Cl"), 0),
        ("16OH-", "16O1H-", ("O", "H"), -1),
        ("HT", "1H3H", ("H", "H"), 0),
        ("40Ar40Ar2+", "40Ar40Ar2+", ("Ar", "Ar"), 2),
        (" 28Si32S ", "28Si32S", ("Si", "S"), 0),
        ("4He1H+", "4He1H+", ("He", "H"), 1),
    ],
)
def test_names_are_read(name, formula, elements, charge):
    molecule = parse(name)
    assert (molecule.formula, molecule.elements, molecule.charge) == (formula, elements, charge)
    assert molecule.name == name.strip()


@pytest.mark.parametrize(
    ("name", "meant"),
    [
        ("C13O16", "13C16O"),
        ("28Si-32S", "28Si32S"),
        ("(28Si)(32S)", "28Si32S"),
        ("28SI32S", "28Si32S"),
        ("28si32s", "28Si32S"),
        ("SiS", "28Si32S"),
        ("29SiS", "29Si32S"),
        ("Si34S", "28Si34S"),
        ("S34Si28+", "34S28Si+"),
        ("\u00b2\u2078Si\u00b3\u00b2S\u207a", "28Si32S+"),
        ("28Si32S\u2212", "28Si32S-"),
        ("14N2", "14N14N"),
        ("14N2+", "14N14N+"),
        ("HCl", "1H35Cl"),
        ("DBr", "2H79Br"),
    ],
)
def test_a_name_with_a_slip_is_refused_with_the_name_meant(name, meant):
    with pytest.raises(UsageError) as refused:
        parse(name)
    assert f"not recognised. Did you mean {meant}" in str(refused.value)
    assert parse(meant).formula == meant


@pytest.mark.parametrize("name", ["11C16O", "30C16O", "12C99O"])
def test_a_wrong_mass_number_lists_the_known_isotopes(name):
    with pytest.raises(UsageError) as refused:
        parse(name)
    assert f'"{name}" not recognised. Known isotopes: 12C, 13C, 14C; 16O, 18O, 17O.' in str(refused.value)


@pytest.mark.parametrize("name", ["", "12C", "xx", "12C16O18O", None, 7, "\x1b[31m", "12C16O++", "12C16O0+"])
def test_what_is_no_diatomic_molecule_is_refused(name):
    with pytest.raises(UsageError) as refused:
        parse(name)
    assert "not recognised" in str(refused.value)
    assert str(refused.value).isprintable()


@given(st.text(max_size=80))
def test_any_text_is_read_or_refused_with_a_printable_message(text):
    try:
        parse(text)
    except UsageError as refused:
        assert str(refused).isprintable()
        assert len(str(refused)) < 600


def test_own_nuclides_can_be_used():
    masses = AME.with_own({"44Sc": ("43.9594028", 1.9e-6)})
    assert parse("44Sc16O", masses).masses[0].source == "own"
    with pytest.raises(UsageError, match="not recognised"):
        parse("44Sc16O")


def test_reduced_mass_reproduces_published_mass_scaling(shared_reference):
    # R. Farrenq et al., J. Mol. Spectrosc. 149, 375 (1991): U_kl and Delta_kl of their Tables III and IV,
    # with their masses, against their Y_kl of 13C16O.
    masses = AME.with_own({"12C": 12, "13C": "13.00335440", "16O": "15.99491502"})
    molecule, electron = parse("13C16O", masses), 5.48580228e-4
    read = {"delimiter": ",", "skip_header": 1}
    universal = np.genfromtxt(shared_reference / "co_farrenq1991_U_delta.csv", **read)
    published = np.genfromtxt(shared_reference / "co_farrenq1991_Y_13C16O.csv", **read)
    for k, l in ((1, 0), (2, 0), (0, 1)):
        u, delta_c, delta_o = universal[(universal[:, 0] == k) & (universal[:, 1] == l)][0, 2:]
        value = published[(published[:, 0] == k) & (published[:, 1] == l)][0, 2]
        first, second = (float(mass.value) for mass in molecule.masses)
        departure = electron * (delta_c / first + delta_o / second)
        # Y is printed with ten digits: half a unit of the last one is 2.4e-10 of Y10.
        assert u * molecule.mu ** -(k / 2 + l) * (1 + departure) == pytest.approx(value, rel=5e-10)


@given(nuclides, st.data())
def test_scaling_there_and_back_is_one(first, data):
    element = first.lstrip("0123456789")
    others = [parse(f"{name}16O") for name in AME.isotopes(element)]
    one, two = data.draw(st.sampled_from(others)), data.draw(st.sampled_from(others))
    with localcontext(prec=DIGITS):
        assert abs(mass_ratio(one, two) * mass_ratio(two, one) - 1) < Decimal("1e-38")
        forth, back = breakdown_factor(one, two, element), breakdown_factor(two, one, element)
        # (M0/Ma)(Ma/M0) = 1; for homonuclear oxygen only one atom of the two differs.
        if element != "O":
            assert abs((1 + forth) * (1 + back) - 1) < Decimal("1e-38")
    assert mass_ratio(one, one) == 1
    assert breakdown_factor(one, one, element) == 0


def test_both_atoms_of_a_homonuclear_molecule_count():
    one, two = parse("14N14N"), parse("15N15N")
    single = breakdown_factor(parse("14N16O"), parse("15N16O"), "N")
    with localcontext(prec=DIGITS):
        assert breakdown_factor(one, two, "N") == 2 * single


def test_factors_by_hand():
    # Arithmetic on AME2020 masses: 12/13.00335483534 - 1.
    assert float(breakdown_factor(parse("12C16O"), parse("13C16O"), "C")) == pytest.approx(
        -1.00335483534 / 13.00335483534, rel=1e-15
    )
    assert breakdown_factor(parse("12C16O"), parse("13C16O"), "O") == 0


@pytest.mark.parametrize(
    ("reference", "other", "why"),
    [
        ("28Si32S", "32S28Si", "write the atoms in the same order: 28Si32S"),
        ("28Si32S", "28Si32S+", "its charge is +1, not +0"),
        ("28Si32S", "28Si16O", "its atoms are Si and O, not Si and S"),
    ],
)
def test_other_molecules_are_refused(reference, other, why):
    for function in (mass_ratio, lambda a, b: breakdown_factor(a, b, "Si")):
        with pytest.raises(UsageError) as refused:
            function(parse(reference), parse(other))
        assert why in str(refused.value)


def test_an_atom_that_is_not_there_is_refused():
    with pytest.raises(UsageError, match="28Si32S has no atom 'C'; its atoms are Si and S"):
        breakdown_factor(parse("28Si32S"), parse("29Si32S"), "C")
