"""Whether the unit declared for a file fits its quantum numbers, to an order of magnitude."""

from __future__ import annotations

import numpy as np

from dunhamfit.lines.faults import Fault
from dunhamfit.lines.line_list import LineList, branch_label
from dunhamfit.units import UNITS, from_wavenumber, to_wavenumber

# cm-1: position / (J'' + 1) in pure rotation, about 2 B, and position / (v' - v'') otherwise, about omega.
# 1Sigma ground states span B 0.0127 (Cs2) to 60.85 (H2) and omega 18 (Hg2) to 4401 (H2): Huber and
# Herzberg, Constants of Diatomic Molecules (1979); the heavy ones from memory, with a margin on either side.
ROTATION = (0.01, 130.0)
VIBRATION = (10.0, 5000.0)
# Share of lines in these ranges below which a declared unit is doubted, and above which another is proposed.
DOUBTED = 0.5
PROPOSED = 0.9


def check_unit_fits(lines: LineList, unit: str, shown: str) -> tuple[Fault, ...]:
    """A fault for a file whose positions look like another unit; empty if they fit.

    Parameters
    ----------
    lines : LineList
        The good rows of one file, positions in cm-1 as converted from `unit`.
    unit : str
    shown : str
        The file as the user named it.
    """
    if len(lines) == 0 or _share(lines, lines.position) >= DOUBTED:
        return ()
    with np.errstate(all="ignore"):
        given = from_wavenumber(lines.position, unit)
        shares = {other: _share(lines, to_wavenumber(given, other)) for other in UNITS if other != unit}
    others = [other for other, share in shares.items() if share >= PROPOSED]
    middle = int(np.argsort(given)[len(given) // 2])
    band = f"{lines.v_upper[middle]}-{lines.v_lower[middle]}"
    label = branch_label(int(lines.j_upper[middle]), int(lines.j_lower[middle]))
    what = f"median {given[middle]:.3g} in a source declared {unit}"
    why = f"no {band} {label} line of a diatomic molecule is near {lines.position[middle]:.3g} cm-1"
    fitting = " or ".join(others)
    remedy = f"set unit: {fitting} would fit" if others else "check the unit and the position column"
    return (Fault(shown, 0, what, why, remedy),)


def _share(lines: LineList, position: np.ndarray) -> float:
    """Share of the lines that have a plausible spacing at these positions in cm-1."""
    step = lines.v_upper - lines.v_lower
    pure = step == 0
    spacing = position / np.where(pure, lines.j_lower + 1, step)
    low, high = (np.where(pure, ROTATION[end], VIBRATION[end]) for end in (0, 1))
    return float(np.mean((spacing >= low) & (spacing <= high)))
