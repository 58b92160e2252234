"""Rows of one source that stand for the same line."""

from __future__ import annotations

import math

import numpy as np

from dunhamfit.lines.faults import Fault
from dunhamfit.lines.line_list import LineList


def find_repeats(lines: LineList, *, both: bool) -> tuple[np.ndarray, tuple[Fault, ...]]:
    """The rows that repeat an earlier row of the same source, and a fault for each.

    Parameters
    ----------
    lines : LineList
        Lines of one source.
    both : bool
        Whether two values of one line may stand side by side; two equal values may not.

    Returns
    -------
    ndarray of bool, shape (n_lines,)
        The later row of each pair.
    tuple of Fault
    """
    # One number for each transition; the limits on v and J keep it far below 2^63.
    key = np.zeros(len(lines), dtype=np.int64)
    for column in (lines.isotopologue, lines.v_upper, lines.v_lower, lines.j_upper, lines.j_lower):
        key = key * (int(column.max(initial=0)) + 1) + column
    here = np.arange(len(lines))
    _, start, transition = np.unique(key, return_index=True, return_inverse=True)
    first = start[transition]
    # The sort is stable, so that a run of equal values begins with its earliest row.
    order = np.lexsort((lines.position, transition))
    begins = np.ones(len(lines), dtype=bool)
    begins[1:] = (np.diff(transition[order]) != 0) | (np.diff(lines.position[order]) != 0)
    earliest = np.empty_like(here)
    earliest[order] = order[np.maximum.accumulate(np.where(begins, here, 0))]
    equal = earliest != here
    different = ~equal & (first != here) & (not both)
    repeated = equal | different
    faults = tuple(
        _equal(lines, index, int(earliest[index])) if equal[index] else _different(lines, index, int(first[index]))
        for index in np.flatnonzero(repeated).tolist()
    )
    return repeated, faults


def _fault(lines: LineList, index: int, what: str, why: str, remedy: str) -> Fault:
    file = lines.sources[lines.source[index]].files[lines.file[index]]
    return Fault(file, int(lines.row[index]), what, why, remedy)


def _equal(lines: LineList, index: int, earlier: int) -> Fault:
    what = f"{lines.label(index)} repeats {lines.place(earlier)} (same source, line and value)"
    # Two copies of a line count as two measurements: its error shrinks by the square root of 2.
    why = f"keeping both would shrink error bars by up to {math.sqrt(2):.2f}"
    return _fault(lines, index, what, why, "remove one")


def _different(lines: LineList, index: int, earlier: int) -> Fault:
    apart = abs(lines.position[index] - lines.position[earlier])
    sigmas = apart / math.hypot(lines.sigma[index], lines.sigma[earlier])
    place = lines.place(earlier)
    what = f"{lines.label(index)} stands at {place} too and the values differ by {sigmas:.2g} sigma"
    remedy = 'which is the correction? remove the other, or set repeats = "both" if both were measured'
    return _fault(lines, index, what, "a source has one value of a line", remedy)
