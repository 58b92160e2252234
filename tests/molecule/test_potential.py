"""Dunham coefficients of a potential: exact potentials, published constants, derivatives."""



from __future__ import annotations

import json
import timeit
from types import SimpleNamespace

import numpy as np
import pytest
from scipy import constants

from dunhamfit.errors import UsageError
from dunhamfit.molecule.potential import (
    ROTATION_FACTOR,
    dunham_coefficients,
    dunham_jacobian,
    dunham_potential,
)

FULL = [(k, l) for l, top in enumerate((7, 5, 4, 3, 1)) for k in range(top + 1) if k + l]
# An invented potential of realistic size.
OMEGA, B, A = 950.0, 0.61, np.array([-2.8, 4.9, -6.8, 8.1, -8.3, 7.2, -5.1, 3.0])


def test_rotation_factor_is_that_of_codata():
    value = constants.h / (8 * np.pi**2 * constants.c * constants.atomic_mass) / 100 * 1e20
    # CODATA 2018 and 2022 (scipy carries one of them) differ by 5e-10 in the atomic mass constant.
    assert pytest.approx(value, rel=1.5e-9) == ROTATION_FACTOR


@pytest.mark.parametrize("orders", [1, 2, 3])
def test_kratzer_potential(shared_reference, orders):
    # Exact Y_kl of V = D(1 - re/r)^2, 25-digit closed form; a_n = (-1)^n (n + 1), omega_e = 2 B gamma.
    exact = json.loads((shared_reference / "kratzer_exact.json").read_text(encoding="utf-8"))
    b_e, gamma = float(exact["B"]), float(exact["gamma"])
    wanted = {tuple(map(int, key.split(","))): float(value) for key, value in exact["Y"].items()}
    terms = [term for term in wanted if term != (0, 0) and term[0] + 2 * term[1] <= 8]
    a = [(-1) ** n * (n + 1) for n in range(1, 2 * 8 + 4 * orders)]
    values = dunham_coefficients(2 * b_e * gamma, b_e, a, terms, orders=orders)
    # What is left out is (1/gamma)^(2 orders) times a small number; rounding: sums of large alternating
    # terms leave eleven good digits in the highest coefficients.
    tolerance = max(2 / gamma ** (2 * orders), 3e-11)
    for term, value in zip(terms, values, strict=True):
        assert value == pytest.approx(wanted[term], rel=tolerance), term


def test_low_coefficients_of_the_kratzer_potential_to_the_last_digits(shared_reference):
    exact = json.loads((shared_reference / "kratzer_exact.json").read_text(encoding="utf-8"))
    b_e, gamma = float(exact["B"]), float(exact["gamma"])
    terms = [(0, 0), (1, 0), (2, 0), (0, 1), (1, 1), (0, 2)]
    a = [(-1) ** n * (n + 1) for n in range(1, 15)]
    values = dunham_coefficients(2 * b_e * gamma, b_e, a, terms, orders=3)
    wanted = [float(exact["Y"][f"{k},{l}"]) for k, l in terms]
    # The third order left out is (1/gamma)^6 = 3e-17 (Y00: (1/gamma)^4 = 1e-11 of itself).
    assert values[1:] == pytest.approx(wanted[1:], rel=1e-13)
    assert values[0] == pytest.approx(wanted[0], rel=1e-9)


def test_morse_potential_has_no_higher_vibrational_coefficients():
    # P. M. Morse, Phys. Rev. 34, 57 (1929): omega_e x_e = b^2 B_e with V = D(1 - exp(-b xi))^2.
    b = 2.3
    n = np.arange(1, 20)
    a = (-b) ** n * (2.0 ** (n + 2) - 2) / np.cumprod(np.arange(1, 22.0))[n + 1]
    values = dunham_coefficients(OMEGA, B, a, [(k, 0) for k in range(7)])
    assert values[1] == pytest.approx(OMEGA, rel=1e-14)
    assert values[2] == pytest.approx(-(b**2) * B, rel=1e-14)
    # Rounding of the cancelling terms, each about eta^(k-1) omega_e times 1e3.
    assert np.abs(values[[0, 3, 4, 5, 6]]).max() < 1e-13 * OMEGA


def test_published_constants_of_a_real_molecule():
    # 12C16O, Huber and Herzberg, Constants of Diatomic Molecules (1979). a1 and a2 follow from alpha_e
    # and omega_e x_e by Dunham's printed relations, solved by hand; D_e is then a prediction.
    omega, b_e, alpha, wexe = 2169.81358, 1.93128087, 0.01750441, 13.28831
    a1 = -alpha * omega / (6 * b_e**2) - 1
    a2 = 1.25 * a1**2 - 2 * wexe / (3 * b_e)
    values = dunham_coefficients(omega, b_e, [a1, a2], [(2, 0), (1, 1), (0, 2)], orders=1)
    # D_e = 6.12147e-6 cm-1 is published; the leading relation is good to the next order, 1e-4.
    assert -values == pytest.approx([wexe, alpha, 6.12147e-6], rel=3e-4)


@pytest.mark.parametrize("orders", [1, 2])
def test_jacobian_is_the_derivative(orders):
    point = np.concatenate([[OMEGA, B], A])

    def value(p):
        return dunham_coefficients(p[0], p[1], p[2:], FULL, orders=orders)

    jacobian = dunham_jacobian(OMEGA, B, A, FULL, orders=orders)
    for column, at in enumerate(point):
        step = np.zeros_like(point)
        step[column] = 4e-4 * abs(at)
        # Fourth-order difference. The step balances its error against rounding: Y70, whose terms
        # cancel, keeps 4e-9 of its largest derivative.
        near, far = value(point + step) - value(point - step), value(point + 2 * step) - value(point - 2 * step)
        slope = (8 * near - far) / (12 * step[column])
        scale = np.abs(jacobian * point).max(axis=1) / abs(at)
        assert np.all(np.abs(jacobian[:, column] - slope) < 3e-8 * scale)


def test_scaling_of_both_energies_scales_every_coefficient(rng):
    # Y_kl is homogeneous of degree one in (omega_e, B_e): Euler's relation.
    jacobian = dunham_jacobian(OMEGA, B, A, FULL)
    values = dunham_coefficients(OMEGA, B, A, FULL)
    assert jacobian[:, 0] * OMEGA + jacobian[:, 1] * B == pytest.approx(values, rel=1e-12)


def test_isotopologues_scale_as_the_mass_law_says():
    # At leading order Y_kl scales as mu^-(k/2 + l): omega_e as mu^-1/2, B_e as mu^-1 (Dunham 1932).
    ratio = 0.83
    light = dunham_coefficients(OMEGA, B, A, FULL, orders=1)
    heavy = dunham_coefficients(OMEGA * ratio, B * ratio**2, A, FULL, orders=1)
    power = np.array([k + 2 * l for k, l in FULL])
    assert heavy == pytest.approx(light * ratio**power, rel=1e-12)


def test_no_potential_coefficients_at_all():
    # A parabola: omega_e alone vibrates; (0, 2) keeps its Kratzer value.
    values = dunham_coefficients(OMEGA, B, [], [(1, 0), (2, 0), (0, 2)], orders=1)
    assert values == pytest.approx([OMEGA, 0.0, -4 * B**3 / OMEGA**2])
    assert dunham_jacobian(OMEGA, B, [], [(1, 0)]).shape == (1, 2)


def test_terms_may_be_records():
    records = [SimpleNamespace(k=1, l=1), SimpleNamespace(k=0, l=1)]
    assert np.array_equal(
        dunham_coefficients(OMEGA, B, A, records), dunham_coefficients(OMEGA, B, A, [(1, 1), (0, 1)])
    )


def test_potential_energy_is_the_closed_form():
    # The Kratzer potential again; its series converges for |xi| < 1.
    depth, r_e = 4.0e4, 1.7
    r = r_e * np.linspace(0.8, 1.2, 9)
    a = [(-1) ** n * (n + 1) for n in range(1, 60)]
    omega = 2 * np.sqrt(depth * B)
    values = dunham_potential(r, r_e=r_e, omega_e=omega, b_e=B, a=a)
    assert values == pytest.approx(depth * (1 - r_e / r) ** 2, rel=1e-12, abs=1e-9)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ((0.0, B, A), "'omega_e' and 'b_e' must be positive (got 0.0 and 0.61 cm-1)"),
        ((OMEGA, -1.0, A), "must be positive"),
        ((OMEGA, float("nan"), A), "must be positive"),
        ((OMEGA, B, [[1.0]]), "'a' must be a row of finite numbers"),
        ((OMEGA, B, [float("inf")]), "'a' must be a row of finite numbers"),
    ],
)
def test_wrong_use_is_refused(arguments, message):
    for function in (dunham_coefficients, dunham_jacobian):
        with pytest.raises(UsageError) as refused:
            function(*arguments, [(1, 0)])
        assert message in str(refused.value)


def test_evaluation_is_quick_once_prepared():
    dunham_jacobian(OMEGA, B, A, FULL)
    # Promise: 5 ms for values and derivatives together; measured 0.4 ms, so a noisy machine passes.
    best = min(
        timeit.repeat(
            lambda: (dunham_coefficients(OMEGA, B, A, FULL), dunham_jacobian(OMEGA, B, A, FULL)),
            number=10,
            repeat=5,
        )
    )
    assert best / 10 < 5e-3
