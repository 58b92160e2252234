"""Lines in the archive: columns stand once under the hash of their content, however many runs use them.

A run names its lines as stretches, each of one source: the hash of the columns, and that
of what is excluded from them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np

from dunhamfit.archive.inputs import source_of
from dunhamfit.archive.problems import reading
from dunhamfit.archive.schema import EXCLUSIONS, LINES, read_once, write_once
from dunhamfit.archive.upgrade import open_current
from dunhamfit.lines.deferred import DeferredLines, Part, part_of
from dunhamfit.lines.line_list import LineList, line_columns

# Each stretch takes some ten datasets; a list whose sources alternate more often is sorted instead.
_STRETCHES_PER_SOURCE = 4


@dataclass(frozen=True)
class Stored:
    """Where a stretch of lines stands: hashes of its columns and of its exclusions ("" where all are used)."""

    lines: str
    exclusions: str


def write_lines(file: h5py.File, lines: LineList) -> tuple[list[dict[str, object]], np.ndarray | None]:
    """Write what the archive does not hold yet of `lines`.

    Returns
    -------
    list of dict
        A stretch each: source, count, and hashes of lines and exclusions.
    ndarray of int, shape (n_lines,), or None
        Place of each line among the stretches; None where that is its place in the list.
    """
    parts, order = _parts(lines)
    stretches = []
    for part in parts:
        stored = part.key
        if not (isinstance(stored, Stored) and _holds(file, stored)):
            stored = _write_part(file, LineList(**part.read(), **_names(lines)))
        stretches.append(
            {"source": part.source, "count": part.count, "lines": stored.lines, "exclusions": stored.exclusions}
        )
    return stretches, order


def lines_of(path: Path, document: Mapping, order: np.ndarray | None) -> LineList:
    """The lines that a run names in `document` (`dunhamfit.archive.inputs`), read when they are looked at."""
    parts = []
    for stretch in document["lines"]:
        stored = Stored(stretch["lines"], stretch["exclusions"])
        reader = _Reader(
            path, stored, stretch["source"], tuple(document["isotopologues"]), tuple(document["reasons"])
        )
        parts.append(Part(stretch["source"], stretch["count"], reader, stored))
    lines = DeferredLines.of(
        parts,
        isotopologues=document["isotopologues"],
        sources=(source_of(item) for item in document["sources"]),
        reasons=document["reasons"],
    )
    return lines if order is None else lines.subset(order)


@dataclass(frozen=True)
class _Reader:
    """Reads the columns of one stretch with the codes of the whole list."""

    path: Path
    stored: Stored
    source: int
    isotopologues: tuple[str, ...]
    reasons: tuple[str, ...]

    def __call__(self) -> dict[str, np.ndarray]:
        with reading(self.path), open_current(self.path) as file:
            columns = read_once(file, "lines", self.stored.lines, LINES)
            names = columns.pop("isotopologues")
            table = np.array([self.isotopologues.index(name) for name in names], dtype=np.int64)
            columns["isotopologue"] = table[columns["isotopologue"]]
            count = len(columns["position"])
            columns["source"] = np.full(count, self.source)
            columns["exclusion"] = np.zeros(count, dtype=np.int64)
            if self.stored.exclusions:
                left_out = read_once(file, "exclusions", self.stored.exclusions, EXCLUSIONS)
                table = np.array([self.reasons.index(text) for text in left_out["reasons"]], dtype=np.int64)
                columns["exclusion"][left_out["line"]] = table[left_out["reason"]]
        return columns


def _names(lines: LineList) -> dict[str, tuple]:
    return {"isotopologues": lines.isotopologues, "sources": lines.sources, "reasons": lines.reasons}


def _holds(file: h5py.File, stored: Stored) -> bool:
    return f"lines/{stored.lines}" in file and (
        not stored.exclusions or f"exclusions/{stored.exclusions}" in file
    )


def _parts(lines: LineList) -> tuple[tuple[Part, ...], np.ndarray | None]:
    """The list as stretches of one source each; sorted by source where sources are mixed."""
    if parts := getattr(lines, "parts", ()):
        return parts, None
    starts = np.flatnonzero(np.diff(lines.source, prepend=-1))
    order = None
    if len(starts) > _STRETCHES_PER_SOURCE * len(lines.sources):
        by_source = np.argsort(lines.source, kind="stable")
        order = np.empty(len(lines), dtype=np.int64)
        order[by_source] = np.arange(len(lines))
        lines = lines.subset(by_source)
        starts = np.flatnonzero(np.diff(lines.source, prepend=-1))
    stops = np.append(starts[1:], len(lines))
    pairs = zip(starts.tolist(), stops.tolist(), strict=True)
    return tuple(part_of(lines.subset(slice(*pair)), int(lines.source[pair[0]])) for pair in pairs), order


def _write_part(file: h5py.File, lines: LineList) -> Stored:
    codes, local = np.unique(lines.isotopologue, return_inverse=True)
    names = [lines.isotopologues[code] for code in codes]
    columns = {item.name: np.asarray(getattr(lines, item.name)) for item in line_columns()}
    columns |= _renamed("isotopologue", "isotopologues", names, local)
    excluded = np.flatnonzero(lines.exclusion)
    exclusions = ""
    if len(excluded):
        codes, local = np.unique(lines.exclusion[excluded], return_inverse=True)
        reasons = [lines.reasons[code] for code in codes]
        left_out = {"line": excluded} | _renamed("reason", "reasons", reasons, local)
        exclusions = write_once(file, "exclusions", EXCLUSIONS, left_out)
    return Stored(write_once(file, "lines", LINES, columns), exclusions)


def _renamed(code: str, table: str, names: list[str], local: np.ndarray) -> dict[str, object]:
    """Codes into a table in the order of the alphabet, so that equal content has an equal hash."""
    order = sorted(range(len(names)), key=names.__getitem__)
    place = np.empty(len(names), dtype=np.int64)
    place[order] = np.arange(len(names))
    return {code: place[local], table: tuple(names[i] for i in order)}
