"""An invented molecule whose bands arrive one after the other, simulated as often as a test needs.

Energies as in J. L. Dunham, Phys. Rev. 41, 721 (1932); the noise is drawn here, and every
source has a shared offset, drawn from the prior that it states.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines
from dunhamfit.fit.update import update_fit
from dunhamfit.inference.arrival import Arrival, check_arrival
from dunhamfit.inference.shifts import parameter_shifts
from dunhamfit.lines.line_list import LineList, Source, merge
from dunhamfit.molecule.terms import TermSet

TRUTH = {(1, 0): 701.25, (2, 0): -2.75, (0, 1): 0.3125, (1, 1): -0.0015, (0, 2): -2.5e-7}
TERMS = TermSet(TRUTH)
SIGMA, OFFSET_SIGMA = 1e-4, 2e-5
BANDS = (("oven", 1, 0, 20), ("oven", 2, 1, 20), ("jet", 2, 0, 15))
NEW = ("winter", 3, 2, 49)  # 49 R and 50 P lines
_J = "j_upper", "j_lower"


def energy(v, j):
    """Term value in cm-1."""
    return sum(value * (v + 0.5) ** k * (j * (j + 1.0)) ** l for (k, l), value in TRUTH.items())


def exact_lines(name: str, upper: int, lower: int, j_max: int, *, offset: float | None = OFFSET_SIGMA) -> LineList:
    """R and P lines of one band without any error."""
    j = np.arange(1, j_max + 1)
    j_lower = np.concatenate([j, j])
    j_upper = np.concatenate([j + 1, j - 1])
    zero = np.zeros(len(j_lower), dtype=int)
    return LineList(
        position=energy(upper, j_upper) - energy(lower, j_lower),
        sigma=np.full(len(zero), SIGMA),
        v_upper=zero + upper,
        j_upper=j_upper,
        v_lower=zero + lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, len(zero) + 1),
        exclusion=zero,
        isotopologues=("28Si32S",),
        sources=(Source(name, offset=offset),),
    )


def moved(lines: LineList, by) -> LineList:
    """The same lines with `by` (cm-1) added to their positions."""
    columns = {name: getattr(lines, name) for name in lines.__dataclass_fields__}
    return LineList(**(columns | {"position": lines.position + by}))


def noisy(lines: LineList, rng: np.random.Generator) -> LineList:
    """With independent noise of the stated size, and the shared offset of each source drawn from its prior."""
    spread = [source.offset or 0.0 for source in lines.sources]
    shared = rng.normal(0.0, spread)[lines.source]
    return moved(lines, rng.normal(0.0, lines.sigma) + shared)


def old_lines() -> LineList:
    return merge([exact_lines(*band) for band in BANDS])


def fitted(lines: LineList, policy: str = "stated") -> Fit:
    return fit_lines(lines, TERMS, reference="28Si32S", policy=policy)


@dataclass(frozen=True, eq=False)
class Outcome:
    """What simulations gave.

    Attributes
    ----------
    shifts : ndarray of float, shape (simulations, parameters)
        In units of their sigma; NaN where it is not known.
    agreeing, shifted : tuple of Arrival
        Tests of bands that agree, and of the same ones with an offset of five sigma.
    """

    shifts: np.ndarray
    agreeing: tuple[Arrival, ...]
    shifted: tuple[Arrival, ...]


def simulate(count: int, *, seed: int, policy: str = "stated") -> Outcome:
    """Fit, test, merge, `count` times."""
    rng = np.random.default_rng(seed)
    old_exact, new_exact = old_lines(), exact_lines(*NEW)
    shifts, agreeing, shifted = [], [], []
    for _ in range(count):
        fit, new = fitted(noisy(old_exact, rng), policy), noisy(new_exact, rng)
        agreeing.append(check_arrival(fit, new))
        sigma = agreeing[-1].shifts[0].sigma
        shifted.append(check_arrival(fit, moved(new, 5 * sigma)))
        shifts.append([item.in_sigma for item in parameter_shifts(fit, update_fit(fit, new))])
    return Outcome(np.array(shifts), tuple(agreeing), tuple(shifted))
