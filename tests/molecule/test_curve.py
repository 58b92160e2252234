"""The curve through turning points against the potential that they come from."""

from __future__ import annotations

import numpy as np
import pytest

from dunhamfit.errors import UsageError
from dunhamfit.molecule.curve import PotentialCurve
from dunhamfit.molecule.rkr import TurningPoints

DEPTH, R_E, STEEPNESS = 3.0e4, 1.9, 1.6


def morse(r):
    """P. M. Morse, Phys. Rev. 34, 57 (1929)."""
    return DEPTH * (1 - np.exp(-STEEPNESS * (r - R_E))) ** 2


def points_of_morse(energy) -> TurningPoints:
    energy = np.asarray(energy, dtype=float)
    s = np.sqrt(energy / DEPTH)
    r_min, r_max = R_E - np.log(1 + s) / STEEPNESS, R_E - np.log(1 - s) / STEEPNESS
    return TurningPoints(np.arange(float(len(energy))), energy, r_min, r_max, R_E, -0.5)


def test_curve_passes_through_every_point_and_the_minimum():
    points = points_of_morse(np.linspace(300, 25000, 40))
    curve = PotentialCurve.through(points)
    assert curve(points.r_min) == pytest.approx(points.energy, rel=1e-11)
    assert curve(points.r_max) == pytest.approx(points.energy, rel=1e-11)
    assert curve(R_E) == pytest.approx(0.0, abs=1e-12)


def test_order_of_the_levels_does_not_matter(rng):
    energy = np.linspace(300, 25000, 40)
    r = np.linspace(1.3, 4.0, 50)
    straight = PotentialCurve.through(points_of_morse(energy))(r)
    assert np.array_equal(PotentialCurve.through(points_of_morse(rng.permutation(energy)))(r), straight)


def test_error_between_the_points_falls_with_the_sixth_power_of_their_distance():
    worst = []
    for count in (20, 40, 80):
        curve = PotentialCurve.through(points_of_morse(np.linspace(0, 20000, count + 1)[1:]))
        grid = curve.on_grid(np.linspace(1.5, 2.9, 700))
        inside = ~grid.extrapolated
        worst.append(np.abs(grid.energy - morse(grid.r))[inside].max())
    # A spline of degree five is of order six; unequal distances near the minimum (r - re goes as the
    # root of the energy) lower the gain, so a factor of eight a doubling is asked.
    assert worst[1] < worst[0] / 8
    assert worst[2] < worst[1] / 8
    assert worst[2] < 1e-2  # cm-1, of 20000


def test_extrapolation_is_smooth_and_marked():
    curve = PotentialCurve.through(points_of_morse(np.linspace(200, 25000, 60)))
    for edge in (curve.r_inner, curve.r_outer):
        step = 1e-5
        inside, outside = curve(np.array([edge - step, edge + step]))
        middle = curve(edge)
        # One slope on both sides: the second difference is of the order of step^2 times the curvature.
        assert abs(inside + outside - 2 * middle) < 1e-3 * abs(outside - inside)
    r = np.array([5.0, 1.0, 2.0])
    grid = curve.on_grid(r)
    assert grid.r.tolist() == [1.0, 2.0, 5.0]
    assert grid.extrapolated.tolist() == [True, False, True]
    steep, level = curve(np.array([0.9, 1.0])), curve(np.array([20.0, 40.0]))
    assert steep[0] > steep[1] > 25000
    assert 25000 < level[0] < level[1] < curve.outside[0]


def test_wrong_use_is_refused():
    with pytest.raises(UsageError, match=r"at least 3 levels \(got 2\)"):
        PotentialCurve.through(points_of_morse([100.0, 200.0]))
    points = points_of_morse(np.linspace(300, 25000, 6))
    turned = TurningPoints(
        points.v, points.energy, np.r_[points.r_min[:5], 1.8], points.r_max, points.r_e, points.v_min
    )
    with pytest.raises(UsageError, match="the inner limb turns back above v = 4"):
        PotentialCurve.through(turned)
    with pytest.raises(UsageError, match="or a level is given twice"):
        PotentialCurve.through(points_of_morse([100.0, 200.0, 200.0, 300.0]))
    with pytest.raises(UsageError, match="'r' must be positive"):
        PotentialCurve.through(points)(np.array([0.0]))
