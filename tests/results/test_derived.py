"""Derived constants against an exactly solvable potential, a handbook, and numerical derivatives."""

from __future__ import annotations

import numpy as np
import pytest
from invented_molecule import BREAKDOWN, REFERENCE, TERMS, simulated_lines
from made_fits import fit_with
from reference.carbon_monoxide import ROTATION_B0_MHZ, ROTATION_B0_SIGMA, ROTATION_D0_MHZ, ROTATION_D0_SIGMA
from reference.kratzer import EXACT_LEVELS, EXACT_Y

from dunhamfit.errors import UsageError
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.reading import read_lines
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet
from dunhamfit.results.derived import derive
from dunhamfit.results.isotopologues import own_constants
from dunhamfit.results.vibrational import vibrational_constants
from dunhamfit.units import MHZ_PER_WAVENUMBER

# The Kratzer potential D (1 - r_e/r)^2 of tests/reference: B_e, and gamma with D = gamma^2 B_e.
B, GAMMA = 1.93128, 561.75
OMEGA = 2 * B * GAMMA


@pytest.fixture(scope="module")
def kratzer():
    constants = {key: float(text) for key, text in EXACT_Y.items() if key != (0, 0)}
    return derive(fit_with(constants, reference="12C16O"))


def test_kratzer_potential_comes_back(kratzer):
    """omega_e = 2 gamma B and B_e = B exactly; what is left out is of relative size (2B/omega)^4 = 1e-11."""
    assert kratzer["omega_e (Dunham)"].value == pytest.approx(OMEGA, rel=1e-10)
    assert kratzer["B_e (Dunham)"].value == pytest.approx(B, rel=1e-10)
    # Leading parts with a1 = -2, a2 = 3 (V = D xi^2 (1 - 2 xi + 3 xi^2 ...)).
    assert kratzer["omega_e x_e (Dunham)"].value == pytest.approx(3 * B, rel=1e-8)
    assert kratzer["alpha_e (Dunham)"].value == pytest.approx(6 * B**2 / OMEGA, rel=1e-8)
    assert kratzer["D_e (Dunham)"].value == pytest.approx(4 * B**3 / OMEGA**2, rel=1e-9)
    mass = float(Masses.ame2020()["16O"].value)
    mu = 12 * mass / (12 + mass)
    assert kratzer["r_e (Dunham)"].value == pytest.approx(np.sqrt(16.857629168 / (mu * B)), rel=1e-10)


def test_kratzer_zero_point_energy(kratzer):
    """V is zero at its minimum, so that the exact level is the zero-point energy; Y00 is good to its leading order."""
    exact = float(EXACT_LEVELS[0, 0])  # the next order of Y00 is (2B/omega)^2 = 3e-6 of it
    assert kratzer["Y00"].value == pytest.approx(float(EXACT_Y[0, 0]), rel=1e-5)
    assert kratzer["zero-point energy"].value == pytest.approx(exact, abs=1e-5 * float(EXACT_Y[0, 0]))


def test_signs_and_plain_values(kratzer):
    """omega_e x_e = -Y20, alpha_e = -Y11, D_e = -Y02 (common practice)."""
    for name, key, sign in (
        ("omega_e", (1, 0), 1),
        ("omega_e x_e", (2, 0), -1),
        ("B_e", (0, 1), 1),
        ("alpha_e", (1, 1), -1),
        ("D_e", (0, 2), -1),
    ):
        assert kratzer[name].value == pytest.approx(sign * float(EXACT_Y[key]), rel=1e-15)
        assert np.isfinite(kratzer[f"{name} correction"].sigma)
        shown = kratzer[f"{name} correction"].value
        assert kratzer[name].value + shown == pytest.approx(kratzer[f"{name} (Dunham)"].value, rel=1e-12)


def test_sigmas_are_those_of_numerical_derivatives():
    """Every value moved along each column of the covariance factor, by a hundredth of a sigma both ways."""
    fit = fit_lines(simulated_lines(seed=2, j_max=20), TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
    found = derive(fit)
    step, moves = 0.01, []
    for column in fit.factor.T:
        up, down = (derive(moved(fit, fit.values + sign * step * column)) for sign in (1, -1))
        moves.append([(a.value - b.value) / (2 * step) for a, b in zip(up.items, down.items, strict=True)])
    of_lines = np.sqrt(np.sum(np.square(moves), axis=0))
    for item, numerical in zip(found.items, of_lines, strict=True):
        # h/(8 pi^2 c u) and the masses add to r_e; rounding of the difference is 1e-3 at the most.
        extra = 0.5 * item.value * 3.1e-10 if item.unit == "A" else 0.0
        assert item.sigma == pytest.approx(np.hypot(numerical, extra), rel=5e-3), item.name


def moved(fit, values):
    """The fit with other values and its own lines."""
    fields = {name: getattr(fit, name) for name in ("model", "lines", "factor", "noise", "groups", "statistics")}
    return type(fit)(values=values, **fields)


def test_missing_terms_are_said():
    two = derive(fit_with({(1, 0): 400.0, (0, 1): 0.1}, reference=REFERENCE))
    assert [item.name for item in two.items] == ["omega_e", "B_e", "r_e"]
    assert any("no Y00" in text for text in two.remarks)
    assert any("breakdown term 01 of every atom; that of Ge and Se is missing" in text for text in two.remarks)
    four = derive(fit_with({(1, 0): 400.0, (2, 0): -0.9, (0, 1): 0.1, (1, 1): -3e-4}, reference=REFERENCE))
    assert four["Y00"].value == pytest.approx(0.1 / 4 * ((3e-4 * 400 / 6 / 0.1**2 + 1) ** 2) - 0.9 / 4, rel=1e-12)
    with pytest.raises(UsageError, match="'r_e \\(BO\\)' was not derived"):
        four["r_e (BO)"]
    wrong = derive(fit_with({(1, 0): -400.0, (2, 0): -0.9, (0, 1): 0.1, (1, 1): -3e-4}, reference=REFERENCE))
    assert any("both must be positive" in text for text in wrong.remarks)


def test_vibrational_constants_are_the_sums():
    fit = fit_lines(simulated_lines(seed=3, j_max=20), TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
    found, own = vibrational_constants(fit, "72Ge80Se"), own_constants(fit, "72Ge80Se")
    assert found.names == ("G", "origin", "B", "D")
    assert found.v.tolist() == [0, 1, 2, 3]
    y = {(t.k, t.l): value for t, value in zip(own.terms, own.values, strict=True)}
    for row, (l, sign) in zip(found.values[[0, 2, 3]], ((0, 1), (1, 1), (2, -1)), strict=True):
        assert row == pytest.approx(sign * sum(y[k, m] * (found.v + 0.5) ** k for k, m in y if m == l), rel=1e-14)
    assert found.values[1] == pytest.approx(found.values[0] - found.values[0, 0])
    assert found.sigmas[1, 0] == 0.0
    assert np.sqrt(np.diag(found.covariance)) == pytest.approx(found.sigmas.ravel(), rel=1e-9, abs=1e-18)
    with pytest.raises(UsageError, match="v_max must be 0 or more"):
        vibrational_constants(fit, v_max=-1)


SIX = ["10", "20", "30", "01", "11", "02"]


@pytest.fixture(scope="module")
def carbon_monoxide(shared_reference):
    lines = read_lines(shared_reference / "co_hitran2016_6iso.par", format="hitran", use="v_upper <= 5")
    terms = TermSet.from_orders([5, 4, 3, 2, 1])
    return fit_lines(lines, terms, reference="12C16O", breakdown={"C": SIX, "O": SIX}, policy="per-band")


@pytest.mark.filterwarnings("ignore:.*HITRAN uncertainty codes")
def test_handbook_values(carbon_monoxide):
    """K. P. Huber and G. Herzberg, Constants of Diatomic Molecules (1979), 12C16O.

    r_e there is that of Y01. The rest was derived from older lines: agreement to 1e-3 and 5e-4 cm-1 in
    omega_e and omega_e x_e, and to 2 in the last digit in B_e; alpha_e and D_e to 2e-5 of their size.
    """
    found = derive(carbon_monoxide)
    assert found["r_e"].value == pytest.approx(1.128323, abs=1e-6)
    assert found["omega_e"].value == pytest.approx(2169.81358, abs=1e-3)
    assert found["omega_e x_e"].value == pytest.approx(13.28831, abs=5e-4)
    assert found["B_e"].value == pytest.approx(1.93128087, abs=3e-8)
    assert found["alpha_e"].value == pytest.approx(0.01750441, abs=3e-7)
    assert found["D_e"].value == pytest.approx(6.12147e-6, rel=2e-5)


@pytest.mark.filterwarnings("ignore:.*HITRAN uncertainty codes")
def test_rotational_constants_of_the_ground_level(carbon_monoxide):
    """B_0 and D_0 of the published pure rotational lines (G. Winnewisser et al., J. Mol. Spectrosc. 184, 468 (1997)).

    The list is mostly calculated, from constants that rest on other lines, and printed to 1e-6 cm-1 (0.03 MHz):
    its own errors count beside both sigmas. Measured difference: 0.36 kHz in B_0, 3e-3 kHz in D_0.
    """
    found = vibrational_constants(carbon_monoxide)
    b_0 = found.values[found.names.index("B"), 0] * MHZ_PER_WAVENUMBER
    d_0 = found.values[found.names.index("D"), 0] * MHZ_PER_WAVENUMBER
    assert b_0 == pytest.approx(ROTATION_B0_MHZ, abs=5 * ROTATION_B0_SIGMA)
    assert d_0 == pytest.approx(ROTATION_D0_MHZ, abs=2 * ROTATION_D0_SIGMA)
