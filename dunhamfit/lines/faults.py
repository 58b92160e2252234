"""A fault: one thing wrong with one row of one input file, and what to do about it."""

from __future__ import annotations

from dataclasses import dataclass

from dunhamfit.errors import InputFaults

SHOWN_AT_MOST = 50


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
    if len(faults) > SHOWN_AT_MOST:
        shown.append(f"... and {len(faults) - SHOWN_AT_MOST} more faults")
    plural = "fault" if len(faults) == 1 else "faults"
    head = f"{rows_fine} rows are fine; {len(faults)} {plural}, nothing was fitted:"
    raise InputFaults(faults, "\n".join([head, *shown]))
