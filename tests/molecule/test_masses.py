"""Atomic masses against CODATA, against the published evaluation, and as a mapping."""

from __future__ import annotations

import csv
import pickle
import subprocess
import sys
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.constants import physical_constants

from dunhamfit.errors import UsageError
from dunhamfit.molecule.masses import ELECTRON_MASS_U, Mass, Masses, as_shown, nuclide_name

AME = Masses.ame2020()
EV_PER_U = physical_constants["atomic mass constant energy equivalent in MeV"][0] * 1e6


@given(st.sampled_from(sorted(AME)))
def test_every_mass_lies_near_its_mass_number_and_has_a_source(nuclide):
    mass = AME[nuclide]
    number = int(nuclide.rstrip("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ"))
    # The largest mass excess of any nuclide kept is about 0.1 u (common knowledge).
    assert abs(mass.value - number) < Decimal("0.3")
    assert 0 <= mass.sigma < 1e-3
    assert mass.source == "AME2020"


@pytest.mark.parametrize(
    ("nuclide", "nucleus", "electrons", "binding_ev"),
    # Total electron binding energies: NIST Atomic Spectra Database, ionisation energies (from memory).
    [
        ("1H", "proton", 1, 13.598),
        ("2H", "deuteron", 1, 13.602),
        ("3H", "triton", 1, 13.603),
        ("3He", "helion", 2, 79.004),
        ("4He", "alpha particle", 2, 79.005),
    ],
)
def test_light_atoms_are_the_codata_nuclei_with_their_electrons(nuclide, nucleus, electrons, binding_ev):
    bare = physical_constants[f"{nucleus} mass in u"][0]
    expected = bare + electrons * float(ELECTRON_MASS_U) - binding_ev / EV_PER_U
    # The adjustments of 2018/2022 and the evaluation of 2020 took partly different measurements: 2e-10 u.
    assert float(AME[nuclide].value) == pytest.approx(expected, abs=2e-10)


def test_electron_mass_is_that_of_codata():
    # 2018 and 2022 recommended values differ by 1.4e-14 u; which one scipy carries depends on its version.
    assert float(ELECTRON_MASS_U) == pytest.approx(physical_constants["electron mass in u"][0], abs=3e-14)


def test_table_equals_the_published_evaluation(shared_reference):
    # M. Wang et al., Chin. Phys. C 45, 030003 (2021): 26 nuclides checked against a second carrier.
    with open(shared_reference / "masses_ame2020.csv", encoding="utf-8") as file:
        for row in csv.DictReader(file):
            mass = AME[row["nuclide"]]
            assert mass.value == Decimal(row["mass_u"])
            assert mass.sigma == float(row["unc_u"])


def test_carbon_12_defines_the_unit():
    assert AME["12C"] == Mass(Decimal("12"), 0.0, "AME2020")


def test_every_element_with_stable_isotopes_is_there():
    # All elements up to bismuth but technetium (43) and promethium (61), with thorium and uranium: 83.
    assert {"3H", "14C", "40K", "209Bi", "232Th", "235U", "238U"} <= set(AME)
    assert len({name.lstrip("0123456789") for name in AME}) >= 83
    assert AME.isotopes("C") == ("12C", "13C", "14C")
    assert AME.isotopes("Cl")[:2] == ("35Cl", "37Cl")
    assert AME.isotopes("Zz") == ()


def test_hydrogen_symbols_name_nuclides():
    assert AME["D"] == AME["2H"]
    assert AME["H"] == AME["1H"]
    assert "T" in AME
    assert AME.get("Q") is None


def test_own_masses_replace_and_join_and_leave_the_table_alone():
    own = AME.with_own({"12C": (12.0, 0.0), "D": "2.0141", "44Ti": ("43.95968995", 7.5e-7)})
    assert own["12C"] == Mass(Decimal("12.0"), 0.0, "own")
    assert own["2H"].value == Decimal("2.0141")
    assert own["44Ti"].sigma == 7.5e-7
    assert own["13C"] is AME["13C"]
    assert AME["2H"].value == Decimal("2.014101777844")
    assert pickle.loads(pickle.dumps(own)) == own


@pytest.mark.parametrize(
    ("own", "message"),
    [
        ({"C12": 12.0}, "must be a mass number and a symbol, such as 28Si (got 'C12')"),
        ({"12C": "heavy"}, "the mass of 12C must be a number of u, or a pair (mass, 1 sigma) (got heavy)"),
        ({"12C": None}, "must be a number of u"),
        ({"12C": 13.5}, "the mass of 12C must lie within 1 u of its mass number (got 13.5 u)"),
        ({"12C": float("nan")}, "must lie within 1 u"),
        ({"13C": (13.003, -1.0)}, "the uncertainty of the mass of 13C must be 0 or positive (got -1.0 u)"),
        ({"13C": (13.003, float("inf"))}, "must be 0 or positive"),
    ],
)
def test_own_masses_that_cannot_be_are_refused(own, message):
    with pytest.raises(UsageError) as refused:
        AME.with_own(own)
    assert message in str(refused.value)


@pytest.mark.parametrize("nuclide", ["11C", "C12", "Qq", "", None, 3, ("12C",)])
def test_a_missing_nuclide_is_a_usage_error_with_advice(nuclide):
    with pytest.raises(UsageError) as refused:
        AME[nuclide]
    assert not isinstance(refused.value, KeyError)
    assert "others can be defined" in str(refused.value)
    if nuclide in ("11C", "C12"):
        assert "known are 12C, 13C, 14C" in str(refused.value)


@given(st.text(max_size=60))
def test_any_text_as_a_name_gives_a_name_or_a_usage_error(text):
    try:
        assert nuclide_name(text) in (text, "1H", "2H", "3H")
    except UsageError as refused:
        assert str(refused).isprintable()
    assert as_shown(text).isprintable()


def test_masses_cannot_be_changed():
    with pytest.raises(AttributeError, match="with_own"):
        AME.table = {}
    with pytest.raises(TypeError):
        AME["12C"] = AME["13C"]


def test_table_is_read_when_it_is_asked_for_and_only_once():
    program = (
        "import builtins, dunhamfit.molecule.masses as m; opened = []; real = builtins.open\n"
        "builtins.open = lambda *a, **k: (opened.append(a[0]), real(*a, **k))[1]\n"
        "assert m._read_table.cache_info().currsize == 0\n"
        "assert m.Masses.ame2020() is m.Masses.ame2020() and len(opened) == 1"
    )
    subprocess.run([sys.executable, "-c", program], check=True)
