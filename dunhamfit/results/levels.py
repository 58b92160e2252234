"""Energy levels with uncertainties, and up to which J they can be used.

Energies count from the level v = 0, J = 0: lines tell differences only, and no sigma could be given
for the height of that level above the minimum of the potential.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.inference.selection import Selection
from dunhamfit.results.isotopologues import own_constants
from dunhamfit.results.observed import INSIDE, ObservedLevels, highest_v
from dunhamfit.results.uncertainty import Levels, Parts, differences, parts_of
from dunhamfit.units import check_unit, from_wavenumber

# Up to here J is looked at for the validity table unless told otherwise.
J_LIMIT = 200


@dataclass(frozen=True, eq=False)
class EnergyLevels:
    """Levels of one isotopologue.

    Attributes
    ----------
    isotopologue : str
    v, j : ndarray of int, shape (n,)
    energy : ndarray of float, shape (n,), cm-1
        Above v = 0, J = 0.
    parts : Parts
        1 sigma of each energy and what it is made of, cm-1.
    where : ndarray of str, shape (n,)
        As in `dunhamfit.results.predict.Predictions`, for the one level.
    """

    isotopologue: str
    v: np.ndarray
    j: np.ndarray
    energy: np.ndarray
    parts: Parts
    where: np.ndarray

    def __len__(self) -> int:
        return len(self.energy)

    @property
    def sigma(self) -> np.ndarray:
        """1 sigma with every part, shape (n,), cm-1."""
        return self.parts.total

    @property
    def inside(self) -> np.ndarray:
        """Whether each level lies inside what was observed of this isotopologue, shape (n,)."""
        return self.where == INSIDE

    def records(self, unit: str = "cm-1") -> list[dict[str, object]]:
        """One flat record a level, at full precision, energies and sigmas in `unit` (not a wavelength)."""
        if check_unit(unit) == "um":
            raise UsageError("energies cannot be given as wavelengths; use cm-1, MHz, GHz or THz")
        columns = {
            "isotopologue": [self.isotopologue] * len(self),
            "v": self.v.tolist(),
            "j": self.j.tolist(),
            "energy": from_wavenumber(self.energy, unit).tolist(),
            **self.parts.columns(self.energy, unit),
            "inside": self.inside.tolist(),
            "where": self.where.tolist(),
            "unit": [unit] * len(self),
        }
        return [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]


@dataclass(frozen=True)
class Validity:
    """Up to which J the levels of one v are known to a tolerance.

    Attributes
    ----------
    v : int
    j_max : int
        Highest J such that no level up to it exceeds the tolerance; -1 where J = 0 does already.
    limited : bool
        False where `j_max` is only as far as was looked.
    j_observed : int
        Highest J that a used line of this isotopologue reaches; -1 where none does.
    """

    v: int
    j_max: int
    limited: bool
    j_observed: int


def energy_levels(
    fit: Fit,
    *,
    j_max: int,
    v_max: int | None = None,
    isotopologue: str | None = None,
    selection: Selection | None = None,
) -> EnergyLevels:
    """E(v, J) for v = 0..v_max and J = 0..j_max, by v and then J.

    Parameters
    ----------
    fit : Fit
    j_max : int
    v_max : int, optional
        The highest v that a used line reaches if not given.
    isotopologue : str, optional
        The reference if not given.
    selection : Selection, optional
        Comparison of sets of terms; with it, sigma contains the spread over near-equal sets.

    Raises
    ------
    UsageError
    """
    v_max = highest_v(fit) if v_max is None else v_max
    if v_max < 0 or j_max < 0:
        raise UsageError(f"the highest v and J must be 0 or more (got {v_max} and {j_max})")
    v, j = (column.ravel() for column in np.mgrid[: v_max + 1, : j_max + 1])
    own = own_constants(fit, isotopologue)
    name = own.isotopologue.name
    upper, lower = Levels(v, j), Levels(np.zeros_like(v), np.zeros_like(j))
    return EnergyLevels(
        isotopologue=name,
        v=v,
        j=j,
        energy=differences(fit, name, upper, lower),
        parts=parts_of(fit, own, upper, lower, selection),
        where=ObservedLevels(fit).words(name, [(v, j)]),
    )


def validity(levels: EnergyLevels, tolerance: float, observed: ObservedLevels) -> tuple[Validity, ...]:
    """For each v, up to which J the sigma of every level stays within `tolerance`.

    Parameters
    ----------
    levels : EnergyLevels
        As `energy_levels` makes them: every J from 0 for each v.
    tolerance : float, cm-1
    observed : ObservedLevels
    """
    if not tolerance > 0:
        raise UsageError(f"the tolerance must be positive (got {tolerance} cm-1)")
    found = []
    for v in range(int(levels.v.max()) + 1):
        beyond = np.flatnonzero(~(levels.sigma[levels.v == v] <= tolerance))
        j_max = int(beyond[0]) - 1 if len(beyond) else int(levels.j.max())
        found.append(Validity(v, j_max, bool(len(beyond)), observed.highest_j(levels.isotopologue, v)))
    return tuple(found)
