"""Turning points and the potential curve of one isotopologue, with the check that the curve gives the levels back.

The points are semiclassical (`dunhamfit.molecule.rkr`) and the curve through them is only as good; so the
radial equation is solved on it (`dunhamfit.molecule.radial`), and what comes back is shown beside the
constants it came from.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial.polynomial import polyval

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.molecule.curve import GridPotential, PotentialCurve
from dunhamfit.molecule.potential import ROTATION_FACTOR
from dunhamfit.molecule.radial import level_constants
from dunhamfit.molecule.rkr import TurningPoints, dunham_turning_points
from dunhamfit.results.isotopologues import OwnConstants, own_constants
from dunhamfit.results.observed import highest_v

# Points for the curve lie this close in v, and go on for some levels beyond those asked for, if the constants
# allow it: the tails of the wavefunctions then stand on the curve and not on its extrapolation.
_SPACING, _FURTHER = 0.25, (10.0, 7.0, 5.0, 3.0, 2.0, 1.0, 0.5, 0.0)
# The grid reaches to where exp(-_DECAY) of the highest wavefunction is left (1e-8). In a harmonic potential waves
# as short as those of the energy at the ends have died away as far; room for a tenth more.
_DECAY, _RESOLUTION = 18.0, 1.1
_MOST_POINTS = 2000


@dataclass(frozen=True, eq=False)
class CurveCheck:
    """Levels of the curve from the radial equation, less those of the constants.

    Attributes
    ----------
    v : ndarray of int, shape (n,)
    origin : ndarray of float, shape (n,), cm-1
        Of G(v) - G(0).
    rotation : ndarray of float, shape (n,), cm-1
        Of B_v.
    zero_point : float, cm-1
        Energy of v = 0 above the minimum of the curve, less G(0) + Y00.
    """

    v: np.ndarray
    origin: np.ndarray
    rotation: np.ndarray
    zero_point: float


@dataclass(frozen=True, eq=False)
class MolecularCurve:
    """Turning points and potential of one isotopologue.

    Attributes
    ----------
    isotopologue : str
    mu : float, u
    points : TurningPoints
        Of v = 0..v_max, with the covariance of the constants propagated.
    grid : GridPotential
        The curve on an equidistant grid, on which `check` was made; `extrapolated` beyond the turning
        points of v_max.
    check : CurveCheck
    """

    isotopologue: str
    mu: float
    points: TurningPoints
    grid: GridPotential
    check: CurveCheck


def molecular_curve(fit: Fit, isotopologue: str | None = None, *, v_max: int | None = None) -> MolecularCurve:
    """Turning points of the levels v = 0..v_max, the potential through them, and its check.

    Parameters
    ----------
    fit : Fit
    isotopologue : str, optional
        The reference if not given.
    v_max : int, optional
        The highest v that a used line reaches if not given.

    Raises
    ------
    UsageError
        If the fit lacks a term that is needed, or the constants do not rise so far.
    NotConverged
        If the curve does not hold the highest level.
    """
    v_max = highest_v(fit) if v_max is None else v_max
    if v_max < 0:
        raise UsageError(f"the highest v must be 0 or more (got {v_max})")
    own = own_constants(fit, isotopologue)
    needed = [(k, l) for k, l in ((1, 0), (2, 0), (0, 1), (1, 1)) if own.index(k, l) is None]
    if needed:
        names = ", ".join(f"Y{k}{l}" for k, l in needed)
        raise UsageError(f"turning points need Y10, Y20, Y01 and Y11; this fit has no {names}")
    vibration, rotation, covariance = _by_v(own)
    mu = own.isotopologue.mu
    # Y00 is part of the lower limit of the integrals, so that the curve has its minimum where the molecule has it.
    points = dunham_turning_points(
        np.arange(v_max + 1.0), vibration, rotation, mu=mu, kaiser=True, covariance=covariance
    )
    curve = _curve(v_max, vibration, rotation, mu)
    r = _grid(curve, points, mu)
    grid = GridPotential(r, curve(r), (r < points.r_min[-1]) | (r > points.r_max[-1]))
    found = level_constants(grid.r, grid.energy, mu=mu, v_max=v_max)
    v = np.arange(v_max + 1)
    expected = polyval(v + 0.5, np.concatenate([[0.0], vibration]))
    check = CurveCheck(
        v=v,
        origin=(found.g - found.g[0]) - (expected - expected[0]),
        rotation=found.b - polyval(v + 0.5, rotation),
        zero_point=float(found.g[0] - points.energy[0]),
    )
    return MolecularCurve(own.isotopologue.name, mu, points, grid, check)


def _by_v(own: OwnConstants) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Y_10, Y_20, ... and Y_01, Y_11, ... without gaps, and their covariance."""
    tops = [max(term.k for term in own.terms if term.l == l) for l in (0, 1)]
    wanted = [(k, 0) for k in range(1, tops[0] + 1)] + [(k, 1) for k in range(tops[1] + 1)]
    places = [own.index(k, l) for k, l in wanted]
    values = np.array([0.0 if place is None else own.values[place] for place in places])
    factor = np.hstack([own.factor, own.mass_factor])
    rows = np.array([np.zeros(factor.shape[1]) if place is None else factor[place] for place in places])
    return values[: tops[0]], values[tops[0] :], rows @ rows.T


def _curve(v_max: int, vibration: np.ndarray, rotation: np.ndarray, mu: float) -> PotentialCurve:
    """The curve through points of fractional v, some way beyond v_max where the constants allow it."""
    for further in _FURTHER:
        v = np.arange(-_SPACING, v_max + further + _SPACING / 2, _SPACING)
        try:
            return PotentialCurve.through(dunham_turning_points(v, vibration, rotation, mu=mu, kaiser=True))
        except (UsageError, NotConverged):
            # Beyond v_max the constants may bend over; at v_max itself they must not.
            if further == _FURTHER[-1]:
                raise
    raise UsageError(f"no curve goes through the levels up to v = {v_max}")


def _grid(curve: PotentialCurve, points: TurningPoints, mu: float) -> np.ndarray:
    """Equidistant r, wide enough and fine enough for the highest level of `points`, shape (n,), A."""
    energy, factor = float(points.energy[-1]), ROTATION_FACTOR / mu
    step = 2e-3
    ends = []
    for start, direction in ((points.r_min[-1], -1), (points.r_max[-1], 1)):
        r = start + direction * step * np.arange(1, int(start * (0.9 if direction < 0 else 3.0) / step))
        fall = np.cumsum(np.sqrt(np.clip(curve(r) - energy, 0.0, None) / factor)) * step
        enough = np.flatnonzero(fall > _DECAY)
        if not len(enough):
            raise NotConverged(
                f"the curve does not rise far enough above v = {points.v[-1]:g} to hold it; ask for fewer levels",
                state={"v": float(points.v[-1])},
            )
        ends.append(float(r[enough[0]]))
    shortest = np.sqrt(float(curve(np.array(ends)).max()) / factor)
    count = int(np.ceil((ends[1] - ends[0]) * _RESOLUTION * shortest / np.pi)) + 1
    return np.linspace(ends[0], ends[1], min(max(count, len(points.v) + 20), _MOST_POINTS))
