"""Levels of exactly solvable potentials, and three routes from a potential to its levels."""

from __future__ import annotations

import json

import mpmath
import numpy as np
import pytest

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.molecule.curve import PotentialCurve
from dunhamfit.molecule.potential import ROTATION_FACTOR, dunham_coefficients, dunham_potential
from dunhamfit.molecule.radial import level_constants, radial_levels
from dunhamfit.molecule.rkr import turning_points

B_E, GAMMA = 1.93128, 561.75  # the potential of kratzer_exact.json
MU = 6.856
R_E = np.sqrt(ROTATION_FACTOR / MU / B_E)
# Rounding of a matrix whose largest element is C (pi/h)^2 = 4e6 cm-1 is 4e-10 cm-1 and more.
ROUNDING = 5e-9


def kratzer(r):
    """V = D(1 - re/r)^2, A. Kratzer, Z. Phys. 3, 289 (1920)."""
    return B_E * GAMMA**2 * (1 - R_E / r) ** 2


def kratzer_level(v: int, x):
    """Exact energy at X = J(J + 1) (E. Fues, Ann. Phys. 385, 367 (1926)), in mpmath numbers."""
    b, gamma = mpmath.mpf("1.93128"), mpmath.mpf("561.75")
    return b * gamma**2 - b * gamma**4 / (v + mpmath.mpf(1) / 2 + mpmath.sqrt(gamma**2 + mpmath.mpf(1) / 4 + x)) ** 2


def test_kratzer_levels_with_rotation(shared_reference):
    exact = json.loads((shared_reference / "kratzer_exact.json").read_text(encoding="utf-8"))["levels"]
    r, j = np.linspace(0.8, 1.8, 400), [0, 1, 10, 40]
    levels = radial_levels(r, kratzer(r), mu=MU, v_max=5, j=j)
    for name, value in exact.items():
        v, rotational = map(int, name.split(","))
        assert levels[v, j.index(rotational)] == pytest.approx(float(value), abs=ROUNDING), name


def test_constants_of_kratzer_levels():
    r = np.linspace(0.8, 1.8, 400)
    constants = level_constants(r, kratzer(r), mu=MU, v_max=5)
    with mpmath.workdps(40):
        exact = np.array(
            [[float(c) for c in mpmath.taylor(lambda x, v=v: kratzer_level(v, x), 0, 3)] for v in range(6)]
        )
    assert constants.v.tolist() == list(range(6))
    assert constants.g == pytest.approx(exact[:, 0], abs=ROUNDING)
    # Measured 2e-14, 7e-13 and 2e-11: each order loses about two digits.
    assert constants.b == pytest.approx(exact[:, 1], rel=1e-12)
    assert -constants.d == pytest.approx(exact[:, 2], rel=5e-11)
    assert constants.h == pytest.approx(exact[:, 3], rel=2e-9)


def test_constants_are_those_of_a_fit_to_low_levels():
    # Common practice: E(v, J) as a polynomial in J(J + 1).
    r, j = np.linspace(0.8, 1.8, 300), np.arange(0, 11)
    levels = radial_levels(r, kratzer(r), mu=MU, v_max=2, j=j)
    constants = level_constants(r, kratzer(r), mu=MU, v_max=2)
    x = j * (j + 1.0)
    for v in range(3):
        fitted = np.polynomial.Polynomial.fit(x, levels[v], 3).convert().coef
        # The fit carries the rounding of the levels, 1e-9 of a span of B X = 200 cm-1.
        assert fitted[0] == pytest.approx(constants.g[v], abs=ROUNDING)
        assert fitted[1] == pytest.approx(constants.b[v], rel=1e-9)
        assert -fitted[2] == pytest.approx(constants.d[v], rel=1e-5)


@pytest.mark.parametrize("points", [300, 600])
def test_morse_levels(points):
    # P. M. Morse, Phys. Rev. 34, 57 (1929): E = omega (v + 1/2) - omega_x (v + 1/2)^2 with J = 0.
    omega, omega_x, mu = 1000.0, 10.0, 10.0
    depth, steepness = omega**2 / (4 * omega_x), np.sqrt(omega_x * mu / ROTATION_FACTOR)
    r = np.linspace(1.35, 4.4, points)
    energy = depth * (1 - np.exp(-steepness * (r - 2.0))) ** 2
    levels = radial_levels(r, energy, mu=mu, v_max=20)[:, 0]
    x = np.arange(21) + 0.5
    assert levels == pytest.approx(omega * x - omega_x * x**2, abs=ROUNDING)


def test_turning_points_lead_back_to_the_exact_levels():
    # Semiclassical G and B of the Kratzer potential (rkr_kratzer.json) have that potential as their
    # curve; its exact quantum levels must come out.
    points = turning_points(
        np.arange(-0.45, 25.0, 0.1),
        lambda v: B_E * GAMMA**2 * (v + 0.5) * (v + 0.5 + 2 * GAMMA) / (v + 0.5 + GAMMA) ** 2,
        lambda v: B_E * (GAMMA / (v + 0.5 + GAMMA)) ** 3,
        mu=MU,
    )
    grid = PotentialCurve.through(points).on_grid(np.linspace(0.85, 1.75, 250))
    levels = radial_levels(grid.r, grid.energy, mu=MU, v_max=5, j=[0, 10])
    for v in range(6):
        for column, x in enumerate((0, 110)):
            # Measured 5e-9 cm-1 for v = 5: the tail beyond the turning points of v = 25, where the curve
            # is extrapolated. With points up to v = 16 it would be 2e-5 cm-1.
            assert levels[v, column] == pytest.approx(float(kratzer_level(v, x)), abs=2e-8)


def test_dunham_relations_and_the_radial_equation_agree():
    # Two routes with nothing in common but the potential, here an invented one without a closed form.
    omega, b_e, mu, a = 1500.0, 1.1, 5.0, [-2.6, 4.3, -5.5, 5.0, -2.0, 0.5]
    r_e = np.sqrt(ROTATION_FACTOR / mu / b_e)
    r = r_e * np.linspace(0.62, 1.45, 400)
    energy = dunham_potential(r, r_e=r_e, omega_e=omega, b_e=b_e, a=a)
    constants = level_constants(r, energy, mu=mu, v_max=2)
    terms = [(k, l) for l, top in enumerate((9, 7, 6, 5)) for k in range(top + 1)]
    y = dict(zip(terms, dunham_coefficients(omega, b_e, a, terms, orders=2), strict=True))
    # The third order that is left out is omega_e (2 B_e/omega_e)^3 = 5e-6 cm-1 in G, times a small number
    # (measured 2.4e-5), and relatively (2 B_e/omega_e)^4 = 5e-12 in the others, times coefficients that
    # grow with l (measured 1.4e-9, 1.3e-8 and 6e-7). With it the two agree to 5e-12 for v = 0.
    tolerances = (6e-8, 4e-9, 4e-8, 2e-6)
    found = (constants.g, constants.b, -constants.d, constants.h)
    for rotation, (numbers, tolerance) in enumerate(zip(found, tolerances, strict=True)):
        for v in range(3):
            series = sum(y[k, l] * (v + 0.5) ** k for k, l in terms if l == rotation)
            assert series == pytest.approx(numbers[v], rel=tolerance), (rotation, v)


def test_mass_and_length_scale_as_the_equation_says():
    # r -> 2 r and mu -> mu/4 leaves C/r^2, and so every level, as it was.
    r = np.linspace(0.85, 1.7, 200)
    one = radial_levels(r, kratzer(r), mu=MU, v_max=3, j=[0, 5])
    other = radial_levels(2 * r, kratzer(r), mu=MU / 4, v_max=3, j=[0, 5])
    assert other == pytest.approx(one, abs=ROUNDING)


def test_a_grid_that_is_too_short_or_too_coarse_is_refused():
    r = np.linspace(0.95, 1.6, 200)
    with pytest.raises(NotConverged, match=r"v = 0 has not died away at r = 0.95 A; extend the grid") as short:
        radial_levels(r, kratzer(r), mu=MU, v_max=3)
    assert short.value.state["v"] == 0
    r = np.linspace(0.8, 1.8, 30)
    with pytest.raises(NotConverged, match=r"too coarse for v = \d+; use more points"):
        level_constants(r, kratzer(r), mu=MU, v_max=5)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"r": np.r_[0.8, np.linspace(0.9, 1.8, 99)]}, "'r' must be positive, rising and equidistant"),
        ({"r": np.linspace(1.8, 0.8, 100)}, "equidistant"),
        ({"r": np.linspace(-0.1, 1.8, 100)}, "positive"),
        ({"energy": np.zeros(99)}, "must be rows of one length, and finite (got shapes (100,) and (99,))"),
        ({"energy": np.full(100, np.nan)}, "and finite"),
        ({"mu": -1.0}, "'mu' must be positive (got -1.0)"),
        ({"v_max": 95}, "at least v_max + 10 points (got 100 for v_max = 95)"),
    ],
)
def test_wrong_use_is_refused(change, message):
    given = {"r": np.linspace(0.8, 1.8, 100), "energy": np.zeros(100), "mu": MU, "v_max": 2} | change
    for function in (radial_levels, level_constants):
        with pytest.raises(UsageError) as refused:
            function(given["r"], given["energy"], mu=given["mu"], v_max=given["v_max"])
        assert message in str(refused.value)
