"""What merging new lines has changed: constants, error bars, predictions, and terms within reach.

The new fit holds the lines of the old one. The covariance of a difference is then C_old - C_new,
and not the sum: the shift of a constant that was well known before is small (J. A. Hausman,
Econometrica 46, 1251 (1978), from memory). All but the terms within reach comes from triangles,
without a look at the lines.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from dunhamfit.algebra.rank import judge
from dunhamfit.algebra.triangle import Triangle, merge
from dunhamfit.fit.design import build_design
from dunhamfit.fit.model import Model
from dunhamfit.fit.noise import group_names
from dunhamfit.fit.record import Fit
from dunhamfit.molecule.terms import Term, TermSet

# Variance lost by less than this part of itself is within what estimated noise factors move it.
_SAME = 1e-6


@dataclass(frozen=True)
class Shift:
    """How one parameter moved.

    Attributes
    ----------
    name, unit : str
    old, new : float
    shift : float
    sigma_shift : float
        sqrt(C_old - C_new) of the parameter; NaN where the fits are not nested or its sigma has not shrunk.
    in_sigma : float
        shift / sigma_shift.
    sigma_old, sigma_new : float
    """

    name: str
    unit: str
    old: float
    new: float
    shift: float
    sigma_shift: float
    in_sigma: float
    sigma_old: float
    sigma_new: float


@dataclass(frozen=True)
class BandShift:
    """How the calculated positions of one old band moved.

    Attributes
    ----------
    band : str
        `source isotopologue 2-0`.
    lines : int
    shift : float
        Root mean square, in the stated uncertainties of the lines.
    expected : float
        The same as C_old - C_new lets expect; NaN where the fits are not nested or that is not positive.
    """

    band: str
    lines: int
    shift: float
    expected: float


@dataclass(frozen=True)
class TermWithinReach:
    """A term that the model does not have, as the lines would determine it beside all others.

    Attributes
    ----------
    name : str
    value, sigma : float, cm-1
        From all lines; NaN and infinity where it cannot be told.
    sigma_old : float, cm-1
        From the old lines alone.
    """

    name: str
    value: float
    sigma: float
    sigma_old: float


def parameter_shifts(old: Fit, new: Fit, *, nested: bool = True) -> tuple[Shift, ...]:
    """Shift of every parameter that both fits have, fixed ones left out, in the order of the new fit.

    Parameters
    ----------
    old, new : Fit
    nested : bool
        Whether the new fit differs from the old one by further lines alone.
    """
    places = {name: place for place, name in enumerate(old.model.names)}
    found = []
    for place, item in enumerate(new.model.parameters):
        before = places.get(item.name)
        if before is None or new.sigmas[place] == 0.0:
            continue
        sigma_old, sigma_new = float(old.sigmas[before]), float(new.sigmas[place])
        lost = (sigma_old - sigma_new) * (sigma_old + sigma_new)
        sigma = float(np.sqrt(lost)) if nested and lost > _SAME * sigma_old**2 else float("nan")
        value, value_before = float(new.values[place]), float(old.values[before])
        found.append(
            Shift(
                item.name,
                item.unit,
                value_before,
                value,
                value - value_before,
                sigma,
                (value - value_before) / sigma,
                sigma_old,
                sigma_new,
            )
        )
    return tuple(found)


def band_shifts(old: Fit, new: Fit, *, nested: bool = True) -> tuple[BandShift, ...]:
    """Shift of the calculated positions of every band of the old fit, the largest first.

    The constants alone are moved; the calibration errors of the spectra are no part of a prediction.
    Nothing is returned for fits with different constants.
    """
    count = len(old.constants)
    if new.model.names[:count] != old.model.names[:count]:
        return ()
    change = new.values[:count] - old.values[:count]
    found = []
    for name, triangle in zip(group_names(old.groups, old.lines), old.triangles, strict=False):
        rows = triangle.r[:, :count]
        moved = float(np.sum((rows @ change) ** 2))
        lost = float(np.sum((rows @ old.factor[:count]) ** 2) - np.sum((rows @ new.factor[:count]) ** 2))
        expected = float(np.sqrt(lost / triangle.n)) if nested and lost > 0 else float("nan")
        found.append(BandShift(name, triangle.n, float(np.sqrt(moved / triangle.n)), expected))
    return tuple(sorted(found, key=lambda item: -item.shift))


def terms_within_reach(old: Fit, new: Fit) -> tuple[TermWithinReach, ...]:
    """Each term that could come next, one at a time: the next k for every l, and the next l.

    Needs the new lines and the old ones, with the noise factors of the new fit.
    """
    wide, candidates = _widened(new)
    design = build_design(wide, new.lines)
    factors = np.ones(len(design.rows.lines))
    factors[: len(design.groups)] = new.noise.by_group
    base = np.array([_value(new, item.name) for item in wide.parameters])
    triangles = design.rows.reweighted(factors).triangles(base)
    known = set(range(len(old.lines.sources)))
    before = [item for item, source in zip(triangles, design.groups.source, strict=False) if source in known]
    before += triangles[len(design.groups) :]
    found = []
    for term in candidates:
        _, sigma_old = _alone(wide, merge(before), term, set(old.model.names))
        value, sigma = _alone(wide, merge(triangles), term, set(new.model.names))
        found.append(TermWithinReach(term, value, sigma, sigma_old))
    return tuple(found)


def _widened(fit: Fit) -> tuple[Model, tuple[str, ...]]:
    tops: dict[int, int] = {}
    for term in fit.model.terms:
        tops[term.l] = max(term.k, tops.get(term.l, -1))
    tops.setdefault(max(tops) + 1, -1)
    # A longer reach in v for a higher l is no part of any published set (the staircase of `TermSet.from_orders`).
    further = [Term(k + 1, l) for l, k in tops.items() if l == 0 or k < tops.get(l - 1, -1)]
    return replace(fit.model, terms=TermSet([*fit.model.terms, *further])), tuple(term.name for term in further)


def _value(fit: Fit, name: str) -> float:
    return float(fit.values[fit.model.names.index(name)]) if name in fit.model.names else 0.0


def _alone(model: Model, whole: Triangle, term: str, others: set[str]) -> tuple[float, float]:
    """Value and sigma of a term beside those of the fit; NaN and infinity where it cannot be told from them."""
    places = [i for i, item in enumerate(model.parameters) if item.name in others and not model.fixed[i]]
    triangle = whole.chosen([*places, model.names.index(term)])
    if judge(triangle.r).dependent:
        return float("nan"), float("inf")
    corner = triangle.r[-1, -1]
    return float(triangle.z[-1] / corner), float(1 / abs(corner))
