r"""A potential curve through classical turning points.

Between the outermost points: a spline of degree five through s(r) = -sqrt(V) on the inner and +sqrt(V) on
the outer limb, with s(r_e) = 0. s is nearly a straight line, and V = s^2 keeps its minimum at r_e. Beyond
them, with value and slope of the spline at the last point (common practice):

    wall      V = a + b/r^12
    outside   V = d - c/r^6

d is no dissociation energy; it is only where the extrapolated curve levels off.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import BSpline, make_interp_spline

from dunhamfit.errors import UsageError
from dunhamfit.molecule.rkr import TurningPoints

_DEGREE = 5
_WALL_POWER = 12
_OUTER_POWER = 6


@dataclass(frozen=True, eq=False)
class GridPotential:
    """A potential on a grid.

    Attributes
    ----------
    r : ndarray of float, shape (n,), A
    energy : ndarray of float, shape (n,), cm-1
    extrapolated : ndarray of bool, shape (n,)
        True where no turning point lies beyond `r`.
    """

    r: np.ndarray
    energy: np.ndarray
    extrapolated: np.ndarray


@dataclass(frozen=True, eq=False)
class PotentialCurve:
    """A potential curve as a function.

    Attributes
    ----------
    spline : BSpline
        s(r), sqrt(cm-1).
    r_inner, r_outer : float, A
        The outermost turning points; outside the curve is extrapolated.
    wall : (a, b), cm-1 and cm-1 A^12
    outside : (d, c), cm-1 and cm-1 A^6
    """

    spline: BSpline
    r_inner: float
    r_outer: float
    wall: tuple[float, float]
    outside: tuple[float, float]

    @classmethod
    def through(cls, points: TurningPoints) -> PotentialCurve:
        """The curve through the turning points, in any order, and the minimum.

        Raises
        ------
        UsageError
            Where there are fewer than three levels, or one limb turns back: then the constants were
            used too high, and the message says up to which v they can be.
        """
        order = np.argsort(points.energy)
        energy, inner, outer = points.energy[order], points.r_min[order], points.r_max[order]
        if len(order) < (_DEGREE + 1) // 2:
            raise UsageError(f"a curve needs at least {(_DEGREE + 1) // 2} levels (got {len(order)})")
        for limb, steps in (("inner", -np.diff(inner)), ("outer", np.diff(outer))):
            if not np.all(steps > 0):
                first = np.flatnonzero(~(steps > 0))[0]
                raise UsageError(
                    f"the {limb} limb turns back above v = {points.v[order][first]:g}, or a level is given twice; "
                    "use the levels below"
                )
        r = np.concatenate([inner[::-1], [points.r_e], outer])
        root = np.sqrt(energy)
        spline = make_interp_spline(r, np.concatenate([-root[::-1], [0.0], root]), k=_DEGREE)
        value, slope = _value_and_slope(spline, r[0])
        b = -slope * r[0] ** (_WALL_POWER + 1) / _WALL_POWER
        wall = float(value - b / r[0] ** _WALL_POWER), float(b)
        value, slope = _value_and_slope(spline, r[-1])
        c = slope * r[-1] ** (_OUTER_POWER + 1) / _OUTER_POWER
        outside = float(value + c / r[-1] ** _OUTER_POWER), float(c)
        return cls(spline, float(r[0]), float(r[-1]), wall, outside)

    def __call__(self, r) -> np.ndarray:
        """V in cm-1 for `r` in A, any shape; r must be positive."""
        r = np.asarray(r, dtype=float)
        if not np.all(r > 0):
            raise UsageError("'r' must be positive")
        inside = self.spline(np.clip(r, self.r_inner, self.r_outer)) ** 2
        a, b = self.wall
        d, c = self.outside
        return np.where(
            r < self.r_inner,
            a + b / r**_WALL_POWER,
            np.where(r > self.r_outer, d - c / r**_OUTER_POWER, inside),
        )

    def on_grid(self, r) -> GridPotential:
        """The curve at the points `r`, shape (n,), sorted, with what is extrapolated marked."""
        r = np.sort(np.atleast_1d(np.asarray(r, dtype=float)))
        return GridPotential(r, self(r), (r < self.r_inner) | (r > self.r_outer))


def _value_and_slope(spline: BSpline, r: float) -> tuple[float, float]:
    """V and dV/dr of V = s^2."""
    root = spline(r)
    return root**2, 2 * root * spline.derivative()(r)
