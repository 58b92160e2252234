"""How the name of an isotopologue is spelled: `28Si32S`, `D35Cl`, `12C1H+`; masses are not known here."""

from __future__ import annotations

import re

from dunhamfit.errors import UsageError
from dunhamfit.lines.faults import visible

_ATOM = r"(?:[1-9][0-9]{0,2}[A-Z][a-z]?|[HDT](?![a-z]))"
_NAME = re.compile(rf"{_ATOM}{_ATOM}(?:[2-9]?[+-])?")
_REVERSED = re.compile(r"([A-Z][a-z]?)([1-9][0-9]{0,2})([A-Z][a-z]?)([1-9][0-9]{0,2})([+-]?)")
_LOOSE = re.compile(r"([1-9][0-9]{0,2})([a-zA-Z]{1,2})([1-9][0-9]{0,2})([a-zA-Z]{1,2})([+-]?)")


def check_spelling(name: str) -> str:
    """Return `name` if it is spelled as an isotopologue of a diatomic molecule.

    Raises
    ------
    UsageError
        If it is not; where the parts can be put right, the message asks "did you mean".
    """
    if _NAME.fullmatch(name):
        return name
    meant = _meant(name)
    hint = f"did you mean {meant}? " if meant else ""
    raise UsageError(
        f'"{visible(name)}" is not recognised; {hint}write mass numbers before the symbols '
        "and the charge last, as in 28Si32S or 12C1H+"
    )


def _meant(name: str) -> str:
    bare = re.sub(r"[\s()\[\]{}^_-]", "", name)
    match = _REVERSED.fullmatch(bare)
    if match:
        return "".join((match[2], match[1], match[4], match[3], match[5]))
    match = _LOOSE.fullmatch(bare)
    if match:
        return "".join((match[1], match[2].capitalize(), match[3], match[4].capitalize(), match[5]))
    return ""
