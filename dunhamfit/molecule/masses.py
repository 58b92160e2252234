"""Atomic masses: the 2020 evaluation as packaged data, and masses that the user defines.

Values are `decimal.Decimal` with every published digit, since mass ratios scale
constants that are known to eleven digits or more; uncertainties are 1 sigma.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from decimal import Decimal, InvalidOperation
from functools import lru_cache
from math import isfinite
from pathlib import Path
from types import MappingProxyType

from dunhamfit.errors import UsageError

# CODATA 2022 recommended value.
ELECTRON_MASS_U = Decimal("5.485799090441e-4")

TABLE = Path(__file__).with_name("data") / "masses_ame2020.csv"
# Symbols that stand for one nuclide of hydrogen (common practice).
HYDROGEN_SYMBOLS = MappingProxyType({"H": "1H", "D": "2H", "T": "3H"})

_FORM = "a mass number and a symbol, such as 28Si"
_NUCLIDE = re.compile(r"([1-9][0-9]{0,2})([A-Z][a-z]?)")
# No nuclide departs from its mass number by as much as 0.2 u; more than this is a slip of the pen.
_FARTHEST_FROM_MASS_NUMBER = Decimal(1)
_SHOWN_AT_MOST = 40


@dataclass(frozen=True)
class Mass:
    """Mass of one neutral atom.

    Attributes
    ----------
    value : Decimal, u
    sigma : float, u
        1 standard uncertainty.
    source : str
        Where the value comes from.
    """

    value: Decimal
    sigma: float
    source: str


class Masses(Mapping):
    """Immutable mapping from the name of a nuclide, such as `12C`, to its `Mass`.

    `H`, `D` and `T` stand for `1H`, `2H` and `3H`. Nuclides of one element stand
    together, the most abundant first.

    Raises
    ------
    UsageError
        When a nuclide is looked up that the table does not hold (never KeyError).
    """

    __slots__ = ("_table",)

    def __init__(self, table: Mapping[str, Mass]):
        object.__setattr__(self, "_table", MappingProxyType(dict(table)))

    def __setattr__(self, name, value):
        raise AttributeError("masses cannot be changed; make another table with 'with_own'")

    @classmethod
    def ame2020(cls) -> Masses:
        """Masses of the 2020 atomic mass evaluation, read once in a process.

        References
        ----------
        M. Wang et al., Chin. Phys. C 45, 030003 (2021), doi:10.1088/1674-1137/abddaf
        """
        return _read_table()

    def with_own(self, own: Mapping[str, object]) -> Masses:
        """A table in which the masses of `own` replace or join those of this one.

        Parameters
        ----------
        own : mapping from nuclide to value, or to (value, sigma), both in u
            Give strings or Decimals where a float would lose digits.

        Raises
        ------
        UsageError
            For a name that is not a mass number and a symbol, and for values that cannot be masses.
        """
        added = {nuclide_name(name): _own_mass(name, given) for name, given in own.items()}
        return Masses({**self._table, **added})

    def __getitem__(self, nuclide: str) -> Mass:
        try:
            return self._table[HYDROGEN_SYMBOLS.get(nuclide, nuclide)]
        except (KeyError, TypeError):
            raise UsageError(self._unknown(nuclide)) from None

    def get(self, nuclide: str, default=None):
        return self._table.get(HYDROGEN_SYMBOLS.get(nuclide, nuclide), default)

    def __contains__(self, nuclide: object) -> bool:
        return isinstance(nuclide, str) and HYDROGEN_SYMBOLS.get(nuclide, nuclide) in self._table

    def __iter__(self) -> Iterator[str]:
        return iter(self._table)

    def __len__(self) -> int:
        return len(self._table)

    def __reduce__(self):
        return (Masses, (dict(self._table),))

    def __repr__(self) -> str:
        own = [name for name, mass in self._table.items() if mass.source != "AME2020"]
        return f"Masses({len(self)} nuclides, own: {', '.join(own) or 'none'})"

    def isotopes(self, element: str) -> tuple[str, ...]:
        """Nuclides of one element in the order of the table; empty where it has none."""
        return tuple(name for name in self._table if element_of(name) == element)

    def _unknown(self, nuclide: object) -> str:
        shown = as_shown(nuclide)
        symbol = re.search(r"[A-Za-z]{1,2}", str(nuclide))
        isotopes = self.isotopes(symbol.group().capitalize()) if symbol else ()
        advice = f"known are {', '.join(isotopes)}" if isotopes else f"expected {_FORM}"
        return f"no mass is known for '{shown}': {advice}; others can be defined with a mass of their own"


def nuclide_name(text: str) -> str:
    """`text` as a mass number and a symbol; raise UsageError if it cannot be read so."""
    name = HYDROGEN_SYMBOLS.get(text, text) if isinstance(text, str) else ""
    if not _NUCLIDE.fullmatch(name):
        raise UsageError(f"a nuclide must be {_FORM} (got '{as_shown(text)}')")
    return name


def element_of(nuclide: str) -> str:
    """Symbol of the element of a nuclide."""
    return nuclide.lstrip("0123456789")


def as_shown(text: object) -> str:
    """`text` on one line, shortened, with control characters escaped: safe on a terminal."""
    escaped = str(text).encode("unicode_escape").decode("ascii")
    return escaped if len(escaped) <= _SHOWN_AT_MOST else escaped[:_SHOWN_AT_MOST] + "..."


def _own_mass(name: str, given: object) -> Mass:
    value, sigma = given if isinstance(given, tuple | list) and len(given) == 2 else (given, 0.0)
    try:
        value, sigma = Decimal(str(value)), float(sigma)
    except (InvalidOperation, TypeError, ValueError):
        raise UsageError(
            f"the mass of {name} must be a number of u, or a pair (mass, 1 sigma) (got {as_shown(given)})"
        ) from None
    number = int(_NUCLIDE.fullmatch(nuclide_name(name)).group(1))
    what = f"mass of {name}"
    if not value.is_finite() or abs(value - number) > _FARTHEST_FROM_MASS_NUMBER:
        raise UsageError(f"the {what} must lie within 1 u of its mass number (got {as_shown(value)} u)")
    if not (isfinite(sigma) and sigma >= 0):
        raise UsageError(f"the uncertainty of the {what} must be 0 or positive (got {sigma} u)")
    return Mass(value, sigma, "own")


@lru_cache(maxsize=1)
def _read_table() -> Masses:
    with open(TABLE, encoding="utf-8") as file:
        rows = [line.rstrip("\n").split(",") for line in file if not line.startswith("#")]
    return Masses({name: Mass(Decimal(value), float(sigma), "AME2020") for name, value, sigma in rows[1:]})
