"""A fault: one thing wrong with one row of one input file, and what to do about it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import InputFaults

SHOWN_AT_MOST = 50
TEXT_AT_MOST = 60


@dataclass(frozen=True)
class Fault:
    """One fault of the input.

    Attributes
    ----------
    file : str
        The file as the user named it.
    line : int
        Line number in the file, from 1; 0 where the whole file is meant.
    what, why, remedy : str
        What stands there, why it cannot be used, and what to do.
    """

    file: str
    line: int
    what: str
    why: str
    remedy: str

    def __str__(self) -> str:
        place = f"{self.file}:{self.line}" if self.line else self.file
        return f"{place}: {self.what}, {self.why}, {self.remedy}"


def raise_faults(faults, *, rows_fine: int) -> None:
    """Raise `InputFaults` for a non-empty list; the text shows the first 50 and counts the rest.

    Raises
    ------
    InputFaults
        With every fault in its attribute, whatever the text shows.
    """
    faults = tuple(faults)
    if not faults:
        return
    shown = [str(fault) for fault in faults[:SHOWN_AT_MOST]]
    hidden = len(faults) - SHOWN_AT_MOST
    if hidden > 0:
        shown.append(f"... and {hidden} more {'fault' if hidden == 1 else 'faults'}")
    rows = "1 row is fine" if rows_fine == 1 else f"{rows_fine} rows are fine"
    plural = "fault" if len(faults) == 1 else "faults"
    head = f"{rows}; {len(faults)} {plural}, nothing was fitted:"
    raise InputFaults(faults, "\n".join([head, *shown]))


def faults_where(
    file: str, lines: np.ndarray, mask: np.ndarray, describe: Callable[[int], tuple[str, str, str]]
) -> list[Fault]:
    """One fault for every row in `mask`; `describe(index)` gives what, why and remedy.

    Parameters
    ----------
    file : str
    lines : ndarray of int, shape (n_rows,)
        Line number of each row in the file.
    mask : ndarray of bool, shape (n_rows,)
    """
    return [Fault(file, int(lines[index]), *describe(index)) for index in np.flatnonzero(mask)]


def visible(text: str, *, at_most: int = TEXT_AT_MOST) -> str:
    """Text of a file made fit for a terminal: control characters escaped, the end cut off if long."""
    text = text.strip(" \t\r\n")
    kept = text if len(text) <= at_most else text[: at_most - 3] + "..."
    return "".join(
        letter if letter.isprintable() else letter.encode("unicode_escape", "surrogatepass").decode("ascii")
        for letter in kept
    )
