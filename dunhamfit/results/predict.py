"""Lines of any band and isotopologue, with their uncertainty and a word on how far the fit can be trusted there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.inference.selection import Selection
from dunhamfit.results.isotopologues import own_constants
from dunhamfit.results.observed import INSIDE, ObservedLevels
from dunhamfit.results.uncertainty import Levels, Parts, differences, parts_of
from dunhamfit.units import check_unit, from_wavenumber


@dataclass(frozen=True, eq=False)
class Predictions:
    """Predicted lines of one isotopologue.

    Attributes
    ----------
    isotopologue : str
    v_upper, j_upper, v_lower, j_lower : ndarray of int, shape (n,)
    position : ndarray of float, shape (n,), cm-1
        Without any calibration error of a source.
    parts : Parts
        1 sigma of each position and what it is made of, cm-1.
    where : ndarray of str, shape (n,)
        "inside" where used lines of this isotopologue reach the v of both levels and a J as high and one
        as low, "other isotopologue" where only all isotopologues together do, else "outside".
    """

    isotopologue: str
    v_upper: np.ndarray
    j_upper: np.ndarray
    v_lower: np.ndarray
    j_lower: np.ndarray
    position: np.ndarray
    parts: Parts
    where: np.ndarray

    def __len__(self) -> int:
        return len(self.position)

    @property
    def sigma(self) -> np.ndarray:
        """1 sigma with every part, shape (n,), cm-1."""
        return self.parts.total

    @property
    def inside(self) -> np.ndarray:
        """Whether both levels lie inside what was observed of this isotopologue, shape (n,)."""
        return self.where == INSIDE

    def records(self, unit: str = "cm-1") -> list[dict[str, object]]:
        """One flat record a line, at full precision, positions and sigmas in `unit`."""
        columns = {
            "isotopologue": [self.isotopologue] * len(self),
            "v_upper": self.v_upper.tolist(),
            "j_upper": self.j_upper.tolist(),
            "v_lower": self.v_lower.tolist(),
            "j_lower": self.j_lower.tolist(),
            "position": from_wavenumber(self.position, check_unit(unit)).tolist(),
            **self.parts.columns(self.position, unit),
            "inside": self.inside.tolist(),
            "where": self.where.tolist(),
            "unit": [unit] * len(self),
        }
        return [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]


def predict(
    fit: Fit,
    *,
    v_upper: int,
    v_lower: int,
    j_max: int,
    isotopologue: str | None = None,
    selection: Selection | None = None,
) -> Predictions:
    """P and R lines of one band; R lines alone for pure rotation.

    Parameters
    ----------
    fit : Fit
    v_upper, v_lower : int
        `v_upper` is `v_lower` for pure rotation.
    j_max : int
        Highest J of the lower level.
    isotopologue : str, optional
        The reference if not given.
    selection : Selection, optional
        Comparison of sets of terms; with it, sigma contains the spread over near-equal sets.

    Raises
    ------
    UsageError
        For a band that does not exist, or another molecule.
    """
    if v_lower < 0 or v_upper < v_lower or j_max < 0:
        raise UsageError(
            f"a band needs v' >= v'' >= 0 and a highest J'' of 0 or more "
            f"(got v' = {v_upper}, v'' = {v_lower}, J'' = {j_max})"
        )
    j = np.arange(j_max + 1)
    p_lower = j[1:][::-1] if v_upper > v_lower else j[:0]
    j_lower = np.concatenate([p_lower, j])
    j_upper = np.concatenate([p_lower - 1, j + 1])
    same = np.ones(len(j_lower), dtype=int)
    return predict_lines(
        fit,
        v_upper * same,
        j_upper,
        v_lower * same,
        j_lower,
        isotopologue=isotopologue,
        selection=selection,
    )


def predict_lines(
    fit: Fit,
    v_upper: np.ndarray,
    j_upper: np.ndarray,
    v_lower: np.ndarray,
    j_lower: np.ndarray,
    *,
    isotopologue: str | None = None,
    selection: Selection | None = None,
) -> Predictions:
    """Lines by their quantum numbers, each array of int of shape (n,); raises what `predict` raises."""
    numbers = [np.asarray(column, dtype=int) for column in (v_upper, j_upper, v_lower, j_lower)]
    if not len(numbers[0]) or any(column.shape != numbers[0].shape or column.min() < 0 for column in numbers):
        raise UsageError("v', J', v'' and J'' must be rows of one length, not empty, of whole numbers from 0")
    own = own_constants(fit, isotopologue)
    name = own.isotopologue.name
    upper, lower = Levels(*numbers[:2]), Levels(*numbers[2:])
    return Predictions(
        name,
        *numbers,
        position=differences(fit, name, upper, lower),
        parts=parts_of(fit, own, upper, lower, selection),
        where=ObservedLevels(fit).words(name, [(upper.v, upper.j), (lower.v, lower.j)]),
    )
