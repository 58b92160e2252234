"""Which isotopologue a code of a HITRAN record means: the user's table, or the published numbering."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from dunhamfit.lines.faults import visible

# Codes of the closed-shell diatomic molecules by molecule number, in the order of the published
# numbering (natural abundance); from memory, CO checked against the 2016 list.
PUBLISHED = {
    5: ("12C16O", "13C16O", "12C18O", "12C17O", "13C18O", "13C17O"),
    14: ("1H19F", "2H19F"),
    15: ("1H35Cl", "1H37Cl", "2H35Cl", "2H37Cl"),
    16: ("1H79Br", "1H81Br", "2H79Br", "2H81Br"),
    17: ("1H127I", "2H127I"),
    46: ("12C32S", "12C34S", "13C32S", "12C33S"),
}
_REMEDY = 'give a table such as isotopologue = {1 = "28Si32S"}'


@dataclass(frozen=True)
class Naming:
    """What the codes of one file mean.

    Attributes
    ----------
    names : dict of int to str
        The codes to be used.
    left_out : dict of int to str
        Names of the codes that were not asked for.
    problem : tuple of str
        What, why and remedy if the file cannot be named at all; empty if it can.
    """

    names: dict[int, str] = field(default_factory=dict)
    left_out: dict[int, str] = field(default_factory=dict)
    problem: tuple[str, ...] = ()


def name_codes(molecule: int, codes: list[int], wanted: str | Mapping[int, str] | None) -> Naming:
    """Name the isotopologue codes of one file; codes without a published name stay out of both maps.

    Parameters
    ----------
    molecule : int
        Molecule number of the records.
    codes : list of int
        The codes that occur.
    wanted : str, mapping or None
        `SourceRequest.isotopologue`.
    """
    published = dict(enumerate(PUBLISHED.get(molecule, ()), start=1))
    if isinstance(wanted, Mapping):
        named = dict(wanted)
    elif wanted is None and published:
        named = published
    elif wanted in published.values():
        named = {code: name for code, name in published.items() if name == wanted}
    elif wanted is not None and published:
        what = f"{visible(wanted)} has no code in the published numbering of molecule {molecule}"
        return Naming(problem=(what, f"that numbers {', '.join(published.values())}", _REMEDY))
    elif wanted is not None and len(codes) == 1:
        named = {codes[0]: wanted}
    else:
        what = f"isotopologue codes {', '.join(map(str, codes))} of molecule {molecule} cannot be named"
        return Naming(problem=(what, "its published numbering is not known here", _REMEDY))
    names = {code: named[code] for code in codes if code in named}
    others = {code: published.get(code, f"code {code}") for code in codes if code not in named}
    return Naming(names, others if wanted is not None else {})


def reason_left_out(code: int, wanted: str | Mapping[int, str] | None) -> str:
    """Why the lines of a code that was not asked for are excluded."""
    where = f"{visible(wanted)}" if isinstance(wanted, str) else "in the table"
    return f"isotopologue code {code} is not {where}"
