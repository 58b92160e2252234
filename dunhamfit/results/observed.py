"""What the used lines reached: whether a level lies inside it."""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.record import Fit

INSIDE, OTHER, OUTSIDE = "inside", "other isotopologue", "outside"


def highest_v(fit: Fit) -> int:
    """The highest v that a used line reaches."""
    return int(fit.lines.v_upper[fit.lines.used].max())


class ObservedLevels:
    """Ranges of J that the used lines of a fit reach, for each v of each isotopologue.

    A level counts as observed if used lines of its isotopologue reach its v, and both a J that is
    no higher and one that is no lower.
    """

    def __init__(self, fit: Fit):
        self._model = fit.model
        lines, used = fit.lines, fit.lines.used
        names = np.array([_formula(fit, name) for name in lines.isotopologues] or [""])
        self._of: dict[str, tuple[np.ndarray, np.ndarray]] = {}
        v = np.concatenate([lines.v_upper[used], lines.v_lower[used]])
        j = np.concatenate([lines.j_upper[used], lines.j_lower[used]])
        code = np.concatenate([lines.isotopologue[used]] * 2)
        for formula in np.unique(names):
            chosen = names[code] == formula
            if chosen.any():
                self._of[str(formula)] = _range(v[chosen], j[chosen])
        self._any = _range(v, j)

    def measured(self, isotopologue: str) -> bool:
        """Whether any line of the isotopologue was used."""
        return self._model.isotopologue(isotopologue).formula in self._of

    def inside(self, isotopologue: str, v: np.ndarray, j: np.ndarray) -> np.ndarray:
        """Whether each level was reached in this isotopologue, shape of `v`."""
        own = self._of.get(self._model.isotopologue(isotopologue).formula)
        return np.zeros(len(v), dtype=bool) if own is None else _within(own, v, j)

    def inside_any(self, v: np.ndarray, j: np.ndarray) -> np.ndarray:
        """Whether each level was reached with all isotopologues taken together, shape of `v`."""
        return _within(self._any, v, j)

    def highest_j(self, isotopologue: str, v: int) -> int:
        """Highest J that was reached for one v of the isotopologue; -1 where none was."""
        own = self._of.get(self._model.isotopologue(isotopologue).formula)
        return -1 if own is None or v >= len(own[1]) else int(own[1][v])

    def words(self, isotopologue: str, levels) -> np.ndarray:
        """`INSIDE`, `OTHER` or `OUTSIDE` for entries whose levels are all given by (v, j) pairs of columns."""
        own = np.all([self.inside(isotopologue, v, j) for v, j in levels], axis=0)
        whole = np.all([self.inside_any(v, j) for v, j in levels], axis=0)
        return np.where(own, INSIDE, np.where(whole, OTHER, OUTSIDE))


def _formula(fit: Fit, name: str) -> str:
    return fit.model.isotopologue(name).formula if fit.model.knows(name) else name


def _range(v: np.ndarray, j: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Lowest and highest J for each v from 0; an empty range where v was not reached."""
    low = np.full(int(v.max(initial=-1)) + 1, np.iinfo(np.int64).max)
    high = np.full(len(low), -1)
    np.minimum.at(low, v, j)
    np.maximum.at(high, v, j)
    return low, high


def _within(ranges: tuple[np.ndarray, np.ndarray], v: np.ndarray, j: np.ndarray) -> np.ndarray:
    low, high = ranges
    known = v < len(low)
    at = np.where(known, v, 0)
    return known & (low[at] <= j) & (j <= high[at])
