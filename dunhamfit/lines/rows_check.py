"""Which rows can be no line of a closed-shell diatomic molecule, and which isotopologues are none.

A line joins two 1Sigma levels by electric-dipole radiation, so |J' - J''| = 1, and its
upper level lies above its lower one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.lines.faults import Fault, faults_where, visible
from dunhamfit.lines.line_list import branch_label
from dunhamfit.lines.request import IsotopologueCheck, SourceRequest
from dunhamfit.lines.rows import FileRows
from dunhamfit.units import sigma_to_wavenumber, to_wavenumber

HIGHEST_J = 250
# Beyond these no diatomic molecule has a bound level, whatever the source allows (from memory, wide margin).
HIGHEST_ALLOWED_J = 5000
HIGHEST_V = 500

# The rows that show a problem, and what, why and remedy for one of them.
Check = tuple[np.ndarray, Callable[[int], tuple[str, str, str]]]


@dataclass(frozen=True, eq=False)
class CheckedRows:
    """What the checks of one file left.

    Attributes
    ----------
    good : ndarray of bool, shape (n_rows,)
        Rows without any fault.
    position, sigma : ndarray of float, shape (n_rows,), cm-1
        Meaningful for good rows; sigma is 1 sigma.
    names : tuple of str
        Isotopologues as the check spells them, parallel to `FileRows.names`.
    faults : tuple of Fault
        Those of the reader and those of the checks, by line.
    """

    good: np.ndarray
    position: np.ndarray
    sigma: np.ndarray
    names: tuple[str, ...]
    faults: tuple[Fault, ...]


def check_rows(rows: FileRows, request: SourceRequest, check_isotopologue: IsotopologueCheck) -> CheckedRows:
    """Check every row of a file; every problem of a row becomes a fault of its own."""
    # Comparisons with NaN are false, so that a cell without a number is not faulted twice.
    with np.errstate(all="ignore"):
        position = to_wavenumber(rows.position, request.unit)
        sigma = sigma_to_wavenumber(rows.uncertainty, rows.position, request.unit)
        sigma = sigma / (request.coverage_factor or 1)
        names, name_check = _isotopologue_check(rows, check_isotopologue)
        checks = [
            *_position_checks(rows.position, position),
            *_uncertainty_checks(rows, sigma),
            *_vibration_checks("v'", rows.v_upper),
            *_vibration_checks("v''", rows.v_lower),
            *_rotation_checks(rows, request.allow_high_j),
            _dipole_check(rows),
            _order_check(rows),
            name_check,
        ]
    good = rows.readable.copy()
    faults = list(rows.faults)
    for mask, describe in checks:
        good &= ~mask
        faults += faults_where(rows.shown, rows.row, mask, describe)
    faults.sort(key=lambda fault: fault.line)
    return CheckedRows(good, position, sigma, names, tuple(faults))


def _position_checks(given: np.ndarray, position: np.ndarray) -> list[Check]:
    return [
        (
            given <= 0,
            lambda i: (
                f"position {given[i]:.12g} is not positive",
                "a line is the upper level minus the lower one",
                "correct the value, or exchange the upper and the lower level",
            ),
        ),
        (
            (given > 0) & ~(np.isfinite(position) & (position > 0)),
            lambda i: (
                f"position {given[i]:.12g} is out of range",
                "in cm-1 it is zero or infinite",
                "correct the value",
            ),
        ),
    ]


def _uncertainty_checks(rows: FileRows, sigma: np.ndarray) -> list[Check]:
    given = rows.uncertainty
    return [
        (
            given == 0,
            lambda i: (
                "uncertainty 0 would give infinite weight",
                "tables often print tiny values as 0.00",
                "give the value, or leave it blank and set uncertainty for the source",
            ),
        ),
        (
            given < 0,
            lambda i: (
                f"uncertainty {given[i]:.6g} is negative",
                "an uncertainty is a positive number",
                "correct the sign or the column map",
            ),
        ),
        (
            (given > 0) & (rows.position > 0) & ~(np.isfinite(sigma) & (sigma > 0)),
            lambda i: (
                f"uncertainty {given[i]:.6g} is out of range",
                "in cm-1 it is zero or infinite",
                "correct the value",
            ),
        ),
    ]


def _vibration_checks(name: str, v: np.ndarray) -> list[Check]:
    remedy = "correct it or the column map"
    return [
        ((v < 0) | (v % 1 > 0), lambda i: (f"{name}={v[i]:g}", "v must be 0, 1, 2, ...", remedy)),
        (
            (v > HIGHEST_V) & (v % 1 == 0),
            lambda i: (f"{name}={v[i]:g} > {HIGHEST_V}", "no molecule has so many bound levels", remedy),
        ),
    ]


def _rotation_checks(rows: FileRows, allow_high_j: bool) -> list[Check]:
    upper, lower, by_branch = rows.j_upper, rows.j_lower, rows.by_branch
    highest = np.fmax(upper, lower)
    limit = HIGHEST_ALLOWED_J if allow_high_j else HIGHEST_J
    allow = "correct it" if allow_high_j else "correct it, or set allow_high_j = true for the source"
    checks: list[Check] = [
        (
            highest > limit,
            lambda i: (f"J={highest[i]:g} > {limit}", "so high a J looks like a typing error", allow),
        ),
        (
            by_branch & (lower >= 0) & (lower % 1 == 0) & (upper < 0),
            lambda i: (
                f"{branch_label(int(upper[i]), int(lower[i]))} does not exist (it needs J'={upper[i]:g})",
                "J in a branch label is the LOWER-state J so P starts at P(1)",
                "if the file counts by m, P lines have m=-J and R lines m=J+1",
            ),
        ),
    ]
    negative = [(lower < 0) & (lower % 1 == 0), (upper < 0) & (upper % 1 == 0) & (not by_branch)]
    fraction = [lower % 1 > 0, (upper % 1 > 0) & (not by_branch)]

    def named(masks: list[np.ndarray], i: int) -> str:
        names = (f"J'={upper[i]:g}", masks[1][i]), (f"J''={lower[i]:g}", masks[0][i])
        return ", ".join(name for name, shows in names if shows)

    declare = "if this column is m, declare it as m"
    open_shell = "half-integer J needs an open-shell model, which this is not"
    checks += [
        (
            negative[0] | negative[1],
            lambda i: (
                named(negative, i),
                "J must be 0, 1, 2, ...",
                declare if negative[0][i] else "correct it",
            ),
        ),
        (
            fraction[0] | fraction[1],
            lambda i: (named(fraction, i), open_shell, "correct it or leave the line out"),
        ),
    ]
    return checks


def _whole(v: np.ndarray, limit: int) -> np.ndarray:
    """Which are quantum numbers at all."""
    return (v >= 0) & (v <= limit) & (v % 1 == 0)


def _whole_j(rows: FileRows) -> np.ndarray:
    return _whole(rows.j_upper, HIGHEST_ALLOWED_J) & _whole(rows.j_lower, HIGHEST_ALLOWED_J)


def _dipole_check(rows: FileRows) -> Check:
    upper, lower = rows.j_upper, rows.j_lower
    return (
        _whole_j(rows) & (np.abs(upper - lower) != 1),
        lambda i: (
            f"{branch_label(int(upper[i]), int(lower[i]))} has dJ={upper[i] - lower[i]:g}",
            "forbidden for an electric-dipole 1Sigma line",
            "correct it or leave the line out; quadrupole lines are not taken",
        ),
    )


def _order_check(rows: FileRows) -> Check:
    """Levels exchanged: the upper one lies below the lower one although the position is positive."""
    allowed = _whole_j(rows) & (np.abs(rows.j_upper - rows.j_lower) == 1)
    allowed &= _whole(rows.v_upper, HIGHEST_V) & _whole(rows.v_lower, HIGHEST_V)
    falls = (rows.v_upper < rows.v_lower) | ((rows.v_upper == rows.v_lower) & (rows.j_upper < rows.j_lower))
    mask = allowed & falls & (rows.position > 0)
    shared = f"{mask.sum()} of {len(mask)} rows show this"

    def describe(i: int) -> tuple[str, str, str]:
        label = branch_label(int(rows.j_lower[i]), int(rows.j_upper[i]))
        swapped = f"{rows.v_lower[i]:g}-{rows.v_upper[i]:g} {label}"
        levels = f"v'={rows.v_upper[i]:g}, v''={rows.v_lower[i]:g}"
        if rows.v_upper[i] == rows.v_lower[i]:
            levels += f", J'={rows.j_upper[i]:g}, J''={rows.j_lower[i]:g}"
        return (
            f"{levels} with a positive position {rows.position[i]:.12g}",
            "the upper level would lie below the lower one",
            f"upper and lower columns exchanged? swapping gives {swapped}; {shared}",
        )

    return mask, describe


def _isotopologue_check(rows: FileRows, check_isotopologue: IsotopologueCheck) -> tuple[tuple[str, ...], Check]:
    """The names as the check spells them, and the rows whose name it refuses."""
    names, refused = [], {}
    for code, (name, reason) in enumerate(zip(rows.names, rows.reasons, strict=True)):
        try:
            names.append(name if reason else check_isotopologue(name))
        except UsageError as error:
            names.append(name)
            what = f'isotopologue "{visible(name)}" cannot be used'
            why = visible(str(error), at_most=400).rstrip(".")
            refused[code] = (what, why, "correct the name or the column map")
    mask = np.isin(rows.isotopologue, list(refused))
    return tuple(names), (mask, lambda i: refused[int(rows.isotopologue[i])])
