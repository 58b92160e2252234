"""Assigned lines of one molecule, as columns.

A LineList is never edited: exclusion is a mask with a reason.
"""

# ruff: noqa: RUF009 (`_column` makes a dataclass field)

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace

import numpy as np

from dunhamfit.errors import UsageError


@dataclass(frozen=True)
class Source:
    """One spectrum, paper or campaign; its lines share calibration and noise behaviour.

    Attributes
    ----------
    name : str
    files : tuple of str
        The files read, as the user named them.
    digests : tuple of str
        SHA-256 of each file, hexadecimal.
    unit : str
        Unit of the positions in the files.
    coverage_factor : float
        k of the uncertainties in the files; `LineList.sigma` is already divided by it.
    offset : float or None, cm-1
        1 sigma of an offset that all lines share; infinite for a free one, None for none.
    scale : float or None, fraction
        1 sigma of a shared fractional error; infinite for a free one, None for none.
    """

    name: str
    files: tuple[str, ...] = ()
    digests: tuple[str, ...] = ()
    unit: str = "cm-1"
    coverage_factor: float = 1.0
    offset: float | None = None
    scale: float | None = None


def _column(dtype: str, unit: str, meaning: str):
    return field(metadata={"dtype": dtype, "unit": unit, "meaning": meaning})


@dataclass(frozen=True, eq=False)
class LineList:
    """Lines as columns, all of shape (n_lines,).

    Codes (`isotopologue`, `source`, `file`, `exclusion`) index the tuples of the same
    kind; exclusion code 0 means that the line is used. The declaration of each column
    (dtype, unit, meaning) is its field's metadata, which the archive reads too.
    """

    position: np.ndarray = _column("f8", "cm-1", "vacuum wavenumber")
    sigma: np.ndarray = _column("f8", "cm-1", "1 standard uncertainty of the position")
    v_upper: np.ndarray = _column("i4", "1", "vibrational quantum number, upper level")
    j_upper: np.ndarray = _column("i4", "1", "rotational quantum number, upper level")
    v_lower: np.ndarray = _column("i4", "1", "vibrational quantum number, lower level")
    j_lower: np.ndarray = _column("i4", "1", "rotational quantum number, lower level")
    isotopologue: np.ndarray = _column("i4", "1", "index of the isotopologue")
    source: np.ndarray = _column("i4", "1", "index of the source")
    file: np.ndarray = _column("i4", "1", "index of the file within its source")
    row: np.ndarray = _column("i4", "1", "line number in the file, from 1")
    exclusion: np.ndarray = _column("i4", "1", "index of the reason for exclusion, 0 for a used line")
    isotopologues: tuple[str, ...] = ()
    sources: tuple[Source, ...] = ()
    reasons: tuple[str, ...] = ("",)

    def __post_init__(self):
        length = len(self.position)
        for item in line_columns():
            column = np.ascontiguousarray(getattr(self, item.name), dtype=item.metadata["dtype"])
            if column.shape != (length,):
                raise UsageError(f"column '{item.name}' must have shape ({length},) (got {column.shape})")
            if column.base is not None or column is getattr(self, item.name):
                column = column.copy()
            column.flags.writeable = False
            object.__setattr__(self, item.name, column)

    def __len__(self) -> int:
        return len(self.position)

    @property
    def used(self) -> np.ndarray:
        """Mask of the lines that are not excluded, shape (n_lines,)."""
        return self.exclusion == 0

    def subset(self, choice) -> LineList:
        """The lines that `choice` (mask or indices) picks; sources, isotopologues and reasons stay."""
        return replace(self, **{item.name: getattr(self, item.name)[choice] for item in line_columns()})

    def excluded(self, mask, reason: str) -> LineList:
        """The same lines with those in `mask` that were still used now excluded for `reason`."""
        if not reason:
            raise UsageError("an exclusion needs a reason")
        reasons = self.reasons if reason in self.reasons else (*self.reasons, reason)
        exclusion = self.exclusion.copy()
        exclusion[np.asarray(mask, dtype=bool) & self.used] = reasons.index(reason)
        return replace(self, exclusion=exclusion, reasons=reasons)

    def label(self, index: int) -> str:
        """Name of one line, such as `12C32S 1-0 R(12)`."""
        j_lower, j_upper = int(self.j_lower[index]), int(self.j_upper[index])
        return (
            f"{self.isotopologues[self.isotopologue[index]]} "
            f"{self.v_upper[index]}-{self.v_lower[index]} {branch_label(j_upper, j_lower)}"
        )

    def place(self, index: int) -> str:
        """Where one line stands, such as `furnace.csv:12`."""
        files = self.sources[self.source[index]].files
        name = files[self.file[index]] if files else self.sources[self.source[index]].name
        return f"{name}:{self.row[index]}"


def line_columns():
    """The declared columns of a LineList, as dataclass fields in order."""
    return tuple(item for item in fields(LineList) if "dtype" in item.metadata)


def branch_label(j_upper: int, j_lower: int) -> str:
    """`R(12)`, `P(3)`: the branch letter of J' - J'' with J'' in parentheses."""
    letter = {1: "R", -1: "P", 0: "Q", 2: "S", -2: "O"}.get(j_upper - j_lower)
    return f"{letter}({j_lower})" if letter else f"J={j_upper}-{j_lower}"


def merge(parts) -> LineList:
    """One LineList of several: names are matched, codes renumbered, the order of lines kept.

    Raises
    ------
    UsageError
        If two different sources bear the same name, or nothing is given.
    """
    parts = list(parts)
    if not parts:
        raise UsageError("no line lists to merge")
    isotopologues: dict[str, int] = {}
    sources: dict[Source, int] = {}
    reasons: dict[str, int] = {"": 0}
    recoded = {"isotopologue": [], "source": [], "exclusion": []}
    for part in parts:
        for name, known, labels in (
            ("isotopologue", isotopologues, part.isotopologues),
            ("source", sources, part.sources),
            ("exclusion", reasons, part.reasons),
        ):
            table = np.array([known.setdefault(label, len(known)) for label in labels], dtype="i4")
            recoded[name].append(table[getattr(part, name)])
    names = [source.name for source in sources]
    if len(set(names)) < len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise UsageError(f"two sources are named '{twice}'; give each source a name of its own")
    columns = {
        item.name: np.concatenate(recoded.get(item.name) or [getattr(part, item.name) for part in parts])
        for item in line_columns()
    }
    return LineList(
        **columns,
        isotopologues=tuple(isotopologues),
        sources=tuple(sources),
        reasons=tuple(reasons),
    )
