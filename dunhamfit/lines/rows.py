"""The rows of one file as columns, in the unit of the source and before any physical check."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from dunhamfit.lines.faults import Fault


@dataclass(frozen=True, eq=False)
class FileRows:
    """What a reader found in one file.

    Attributes
    ----------
    shown : str
        The file as the user named it.
    count : int
        Rows of data in the file, whether they could be read or not.
    row : ndarray of int, shape (n_rows,)
        Line number of each row that has the right shape; n_rows <= count.
    position, uncertainty : ndarray of float, shape (n_rows,), in the unit of the source
    v_upper, j_upper, v_lower, j_lower : ndarray of float, shape (n_rows,)
        As they stand in the file, so that a fraction can be seen; NaN for what could not be read.
    isotopologue : ndarray of int, shape (n_rows,)
        Index into `names`; -1 for what could not be read.
    readable : ndarray of bool, shape (n_rows,)
        False for a row that already has a fault.
    names : tuple of str
        Isotopologues, as the file or the source names them.
    reasons : tuple of str
        Why the lines of each name are left out; empty text for those that are not.
    by_branch : bool
        Whether J' was derived from a branch letter.
    faults : tuple of Fault
    notices : tuple of str
    """

    shown: str
    count: int
    row: np.ndarray
    position: np.ndarray
    uncertainty: np.ndarray
    v_upper: np.ndarray
    j_upper: np.ndarray
    v_lower: np.ndarray
    j_lower: np.ndarray
    isotopologue: np.ndarray
    readable: np.ndarray
    names: tuple[str, ...] = ()
    reasons: tuple[str, ...] = ()
    by_branch: bool = False
    faults: tuple[Fault, ...] = ()
    notices: tuple[str, ...] = ()


NUMBERS = ("position", "uncertainty", "v_upper", "j_upper", "v_lower", "j_lower")


def no_rows(shown: str, faults, *, count: int = 0) -> FileRows:
    """A file none of whose `count` rows could be read."""
    empty = np.empty(0)
    columns = {
        item.name: empty.astype({"row": int, "isotopologue": int, "readable": bool}.get(item.name, float))
        for item in fields(FileRows)
        if item.name in (*NUMBERS, "row", "isotopologue", "readable")
    }
    return FileRows(shown=shown, count=count, faults=tuple(faults), **columns)
