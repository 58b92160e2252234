"""Turning points against closed forms, and their uncertainties against numerical derivatives."""

from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.molecule.potential import ROTATION_FACTOR
from dunhamfit.molecule.rkr import dunham_turning_points, turning_points, y00_constant

GAMMA = 100.0
# An invented molecule of realistic size.
VIBRATION = np.array([950.0, -5.1, 4e-3, 2e-5])
ROTATION = np.array([0.61, -4.2e-3, 2e-6])
MU = 9.7


def kratzer_energy(v):
    """Semiclassical G of V = D(1 - re/r)^2 with B = 1, re = 1: closed form of rkr_kratzer.json."""
    return GAMMA**2 * (1 - GAMMA**2 / (v + 0.5 + GAMMA) ** 2)


def kratzer_rotation(v):
    return (GAMMA / (v + 0.5 + GAMMA)) ** 3


def test_kratzer_turning_points(shared_reference):
    rows = json.loads((shared_reference / "rkr_kratzer.json").read_text(encoding="utf-8"))["rows"]
    # B = 1 and re = 1 mean that h/(8 pi^2 c mu) = 1.
    points = turning_points(
        [row["v"] for row in rows], kratzer_energy, kratzer_rotation, mu=ROTATION_FACTOR
    )
    # The table has 15 digits; the quadrature is asked for 1e-10 and reaches 1e-13.
    assert points.energy == pytest.approx([float(row["G"]) for row in rows], rel=1e-14)
    assert points.r_min == pytest.approx([float(row["rmin"]) for row in rows], rel=1e-12)
    assert points.r_max == pytest.approx([float(row["rmax"]) for row in rows], rel=1e-12)
    assert points.r_e == pytest.approx(1.0, rel=1e-14)


@given(st.floats(min_value=-0.45, max_value=80), st.floats(min_value=1, max_value=100))
def test_kratzer_turning_points_anywhere(v, mu):
    points = turning_points([v], kratzer_energy, kratzer_rotation, mu=mu)
    depth = np.sqrt(kratzer_energy(v)) / GAMMA
    r_e = np.sqrt(ROTATION_FACTOR / mu)
    assert points.r_min[0] == pytest.approx(r_e / (1 + depth), rel=1e-10)
    assert points.r_max[0] == pytest.approx(r_e / (1 - depth), rel=1e-10)


@given(st.floats(min_value=-0.49, max_value=60))
def test_width_of_a_morse_well_depends_on_two_constants(v):
    # V = D(1 - exp(-b (r - re)))^2: r_max - r_min = ln((1 + s)/(1 - s))/b with s = sqrt(G/D), whatever B(v).
    omega, wexe, b_e = 1000.0, 7.0, 0.5
    points = dunham_turning_points([v], [omega, -wexe], [b_e, -1e-3], mu=MU)
    x, depth = v + 0.5, omega**2 / (4 * wexe)
    s = np.sqrt((omega * x - wexe * x**2) / depth)
    beta = np.sqrt(wexe * MU / ROTATION_FACTOR)
    # 1 - s loses digits towards the limit, at v + 1/2 = 71.4.
    assert points.r_max[0] - points.r_min[0] == pytest.approx(np.log((1 + s) / (1 - s)) / beta, rel=1e-9)


def test_both_ways_to_give_the_constants_agree():
    v = np.array([0.0, 2.5, 9.0, 20.0])
    dunham = dunham_turning_points(v, VIBRATION, ROTATION, mu=MU)
    functions = turning_points(
        v,
        lambda at: np.polynomial.polynomial.polyval(at + 0.5, np.r_[0.0, VIBRATION]),
        lambda at: np.polynomial.polynomial.polyval(at + 0.5, ROTATION),
        mu=MU,
    )
    assert dunham.r_min == pytest.approx(functions.r_min, rel=1e-11)
    assert dunham.r_max == pytest.approx(functions.r_max, rel=1e-11)
    assert np.isnan(dunham.r_min_sigma).all()
    # B_e = 16.857629168/(mu r_e^2), CODATA 2022.
    assert dunham.r_e == pytest.approx(np.sqrt(16.857629168 / MU / 0.61), rel=1e-14)


def test_y00_of_the_kratzer_potential(shared_reference):
    exact = json.loads((shared_reference / "kratzer_exact.json").read_text(encoding="utf-8"))
    constants = [float(exact["Y"][name]) for name in ("1,0", "2,0", "0,1", "1,1")]
    # The formula takes the Y_kl for their leading parts: relative error of order 1/gamma^2 = 3e-6 a few times over.
    assert y00_constant(*constants) == pytest.approx(float(exact["Y"]["0,0"]), rel=3e-5)


def test_lower_limit_of_kaiser():
    plain = dunham_turning_points([0.0], VIBRATION, ROTATION, mu=MU)
    shifted = dunham_turning_points([0.0], VIBRATION, ROTATION, mu=MU, kaiser=True)
    y00 = y00_constant(*VIBRATION[:2], *ROTATION[:2])
    assert plain.v_min == -0.5
    x = shifted.v_min + 0.5
    assert y00 + x * VIBRATION[0] + x**2 * VIBRATION[1] == pytest.approx(0.0, abs=1e-9)
    assert shifted.energy - plain.energy == pytest.approx(y00, rel=1e-10)


@pytest.mark.parametrize("kaiser", [False, True])
def test_covariance_is_propagated_with_the_right_derivatives(kaiser, rng):
    v = np.array([0.0, 1.0, 4.5, 15.0])
    point = np.concatenate([VIBRATION, ROTATION])
    size = len(VIBRATION)

    def radii(p):
        points = dunham_turning_points(v, p[:size], p[size:], mu=MU, kaiser=kaiser)
        return np.concatenate([points.r_min, points.r_max])

    columns = []
    for n, value in enumerate(point):
        step = np.zeros_like(point)
        step[n] = 1e-5 * abs(value)
        columns.append((radii(point + step) - radii(point - step)) / (2 * step[n]))
    numerical = np.stack(columns, axis=1)
    root = rng.standard_normal((point.size, point.size)) * np.abs(point)[:, None] * 1e-6
    covariance = root @ root.T
    points = dunham_turning_points(v, VIBRATION, ROTATION, mu=MU, kaiser=kaiser, covariance=covariance)
    expected = numerical @ covariance @ numerical.T
    # Central difference of radii good to 1e-12 over a step of 1e-5: 1e-6 with room for the summation.
    assert np.abs(points.covariance - expected).max() < 1e-5 * np.abs(expected).max()
    assert points.r_max_sigma == pytest.approx(np.sqrt(np.diag(expected))[len(v) :], rel=1e-5)


def test_constants_used_too_high_are_refused():
    with pytest.raises(UsageError, match=r"G\(v\) must rise up to the level: it does not for v = 99"):
        # 1000 x - 7 x^2 has its top at x = 71.4.
        dunham_turning_points([3.0, 99.0], [1000.0, -7.0], [0.5], mu=MU)
    with pytest.raises(UsageError, match=r"B\(v\) must be positive"):
        dunham_turning_points([40.0], [1000.0], [0.5, -0.1], mu=MU)
    with pytest.raises(NotConverged, match="nearly flat at the highest v") as stopped:
        turning_points([0.5], lambda v: 1 - np.abs(v - 0.5) ** 1.5, lambda v: 1.0 + 0 * v, mu=MU)
    assert "f" in stopped.value.state


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: dunham_turning_points([-0.5], VIBRATION, ROTATION, mu=MU), "above the lower limit -0.5"),
        (lambda: dunham_turning_points([[1.0]], VIBRATION, ROTATION, mu=MU), "'v' must be a row of numbers"),
        (lambda: dunham_turning_points([1.0], VIBRATION, ROTATION, mu=0.0), "'mu' must be positive (got 0.0)"),
        (lambda: dunham_turning_points([1.0], [950.0], [0.6], mu=MU, kaiser=True), "Y_10, Y_20, Y_01 and Y_11"),
        (
            lambda: dunham_turning_points([1.0], VIBRATION, ROTATION, mu=MU, covariance=np.eye(3)),
            "'covariance' must have shape (7, 7)",
        ),
        (lambda: dunham_turning_points([1.0], [1.0, 9.0], [0.1, 5.0], mu=MU, kaiser=True), "Y_00"),
    ],
)
def test_wrong_use_is_refused(call, message):
    with pytest.raises((UsageError, NotConverged)) as refused:
        call()
    assert message in str(refused.value)
