"""One source from its files to a LineList: read, check, convert, choose; every fault in one pass."""

from __future__ import annotations

import hashlib
import os
import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from dunhamfit.errors import DunhamfitWarning, UsageError
from dunhamfit.lines.choice import parse_choice
from dunhamfit.lines.delimited import read_delimited
from dunhamfit.lines.duplicates import find_repeats
from dunhamfit.lines.faults import Fault, raise_faults, visible
from dunhamfit.lines.hitran import read_hitran
from dunhamfit.lines.line_list import LineList, Source, merge
from dunhamfit.lines.plausibility import check_unit_fits
from dunhamfit.lines.request import IsotopologueCheck, SourceRequest
from dunhamfit.lines.rows import FileRows, no_rows
from dunhamfit.lines.rows_check import CheckedRows, check_rows
from dunhamfit.lines.spelling import check_spelling
from dunhamfit.units import sigma_to_wavenumber


@dataclass(frozen=True, eq=False)
class Reading:
    """What reading one source gave.

    Attributes
    ----------
    lines : LineList
        Every row without a fault, used or excluded. If there are faults, it is not fit for use.
    faults : tuple of Fault
    notices : tuple of str
        What was taken for granted and what was left out, to be shown to the user.
    rows : int
        Rows of data in the files; always used + excluded + rejected.
    rejected : int
        Rows with at least one fault.
    """

    lines: LineList
    faults: tuple[Fault, ...]
    notices: tuple[str, ...]
    rows: int
    rejected: int

    @property
    def used(self) -> int:
        """Number of lines that are used."""
        return int(self.lines.used.sum())

    @property
    def excluded(self) -> int:
        """Number of lines that are excluded, each with a reason."""
        return len(self.lines) - self.used


def read_source(request: SourceRequest, *, check_isotopologue: IsotopologueCheck | None = None) -> Reading:
    """Read every file of a source and check every row; faults are returned, not raised.

    Parameters
    ----------
    request : SourceRequest
    check_isotopologue : callable, optional
        Takes the name of an isotopologue and returns it as it should be written, or raises
        UsageError; by default only the spelling is checked.

    Raises
    ------
    UsageError
        If the source itself names an isotopologue that the check refuses.
    """
    check = check_isotopologue or check_spelling
    _check_named(request, check)
    shown = tuple(visible(name, at_most=1000) for name in request.shown)
    contents = _load_all(request, shown)
    source = _source(request, shown, contents)
    parts, faults, notices, count = [], [], _coverage_notice(request), 0
    for index, (name, content) in enumerate(zip(shown, contents, strict=True)):
        rows = _read_file(content, name, request)
        checked = check_rows(rows, request, check)
        lines = _to_lines(rows, checked, source, index)
        faults += [*checked.faults, *check_unit_fits(lines, request.unit, name)]
        notices += rows.notices
        count += rows.count
        parts.append(lines)
    lines, repeats = _without_repeats(merge(parts), both=request.repeats == "both")
    order = {name: place for place, name in enumerate(shown)}
    faults = sorted([*faults, *repeats], key=lambda fault: (order[fault.file], fault.line))
    if request.use is not None:
        lines = lines.excluded(~parse_choice(request.use).mask(lines), f"use: {request.use}")
    if len(lines) and not lines.used.any():
        what = f"none of the {count} rows is used"
        why = "; ".join(lines.reasons[code] for code in np.unique(lines.exclusion))
        remedy = "correct the choice or leave the source out"
        faults.append(Fault(f'source "{request.name}"', 0, what, why, remedy))
    return Reading(lines, tuple(faults), tuple(notices), count, count - len(lines))


def read_lines(
    path: str | Path,
    *,
    format: str = "delimited",
    isotopologue: str | Mapping[int, str] | None = None,
    columns: Mapping[str, str | int] | None = None,
    band: str | None = None,
    unit: str = "cm-1",
    uncertainty: float | None = None,
    coverage_factor: float = 1.0,
    offset: float | None = None,
    scale: float | None = None,
    use: str | None = None,
    name: str | None = None,
    decimal: str = ".",
    delimiter: str | None = None,
    header: bool | None = None,
    comment: tuple[str, ...] = ("#", "!"),
    repeats: str = "refuse",
    allow_high_j: bool = False,
) -> LineList:
    """Read one file of assigned lines as one source.

    Parameters
    ----------
    path : str or Path
    name : str, optional
        Name of the source; by default that of the file without its ending.
    format, isotopologue, columns, band, unit, uncertainty, coverage_factor, offset, scale, use, decimal, \
delimiter, header, comment, repeats, allow_high_j
        As in `SourceRequest`.

    Returns
    -------
    LineList
        Positions and 1-sigma uncertainties in cm-1.

    Raises
    ------
    InputFaults
        If anything is wrong with any row; it holds every fault.
    UsageError
        If the arguments ask for what does not exist.

    Warns
    -----
    DunhamfitWarning
        Once for everything that was taken for granted, such as the decade codes of HITRAN records.
    """
    request = SourceRequest(
        name=Path(path).stem if name is None else name,
        files=(Path(path),),
        shown=(str(path),),
        format=format,
        isotopologue=isotopologue,
        columns=columns,
        band=band,
        unit=unit,
        uncertainty=uncertainty,
        coverage_factor=coverage_factor,
        offset=offset,
        scale=scale,
        use=use,
        decimal=decimal,
        delimiter=delimiter,
        header=header,
        comment=comment,
        repeats=repeats,
        allow_high_j=allow_high_j,
    )
    reading = read_source(request)
    raise_faults(reading.faults, rows_fine=len(reading.lines))
    for notice in reading.notices:
        warnings.warn(notice, DunhamfitWarning, stacklevel=2)
    return reading.lines


def _check_named(request: SourceRequest, check: IsotopologueCheck) -> None:
    """Check the isotopologues that the source itself names."""
    named = request.isotopologue
    names = list(named.values()) if isinstance(named, Mapping) else [named] if named else []
    for name in names:
        try:
            check(name)
        except UsageError as error:
            raise UsageError(f"source '{request.name}': {error}") from None


def _load_all(request: SourceRequest, shown: tuple[str, ...]) -> list[bytes | Fault]:
    """The bytes of every file, or the fault that says why there are none; no file is taken twice."""
    contents: list[bytes | Fault] = []
    seen: dict[str, str] = {}
    for path, name in zip(request.files, shown, strict=True):
        content = _load(path, name)
        place = name if isinstance(content, Fault) else os.path.realpath(path)
        if place in seen and isinstance(content, bytes):
            why = f"the source names it as {seen[place]} already"
            content = Fault(name, 0, "the file is listed twice", why, "remove one")
        seen.setdefault(place, name)
        contents.append(content)
    return contents


def _load(path: Path, shown: str) -> bytes | Fault:
    try:
        return path.read_bytes()
    except FileNotFoundError:
        why, remedy = "nothing could be read", "check its name and folder"
        return Fault(shown, 0, "the file does not exist", why, remedy)
    except IsADirectoryError:
        return Fault(shown, 0, "this is a folder", "a file was expected", "name the file")
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        return Fault(shown, 0, "the file cannot be read", visible(reason), "check its name and permissions")


def _read_file(content: bytes | Fault, shown: str, request: SourceRequest) -> FileRows:
    """The rows of one file; one without any is a fault."""
    if isinstance(content, Fault):
        return no_rows(shown, [content])
    reader = read_hitran if request.format == "hitran" else read_delimited
    rows = reader(content, shown, request)
    if rows.count == 0 and not rows.faults:
        why = "the file is empty or holds comments only"
        return no_rows(shown, [Fault(shown, 0, "no rows of data", why, "name another file or remove it")])
    return rows


def _without_repeats(lines: LineList, *, both: bool) -> tuple[LineList, tuple[Fault, ...]]:
    """The lines without those that repeat an earlier one, and the faults; lines left out may repeat."""
    in_question = np.flatnonzero(lines.used)
    repeated, faults = find_repeats(lines.subset(in_question), both=both)
    kept = np.ones(len(lines), dtype=bool)
    kept[in_question[repeated]] = False
    return lines.subset(kept), faults


def _source(request: SourceRequest, shown: tuple[str, ...], contents: list[bytes | Fault]) -> Source:
    digests = ["" if isinstance(item, Fault) else hashlib.sha256(item).hexdigest() for item in contents]
    offset = request.offset
    if offset is not None and np.isfinite(offset):
        offset = float(sigma_to_wavenumber(offset, 1.0, request.unit))
    return Source(
        name=request.name,
        files=shown,
        digests=tuple(digests),
        unit=request.unit,
        coverage_factor=float(request.coverage_factor or 1),
        offset=None if offset is None else float(offset),
        scale=None if request.scale is None else float(request.scale),
    )


def _coverage_notice(request: SourceRequest) -> list[str]:
    k = request.coverage_factor
    if k is None and request.format == "hitran":
        return []  # Its records hold no stated uncertainty that k could belong to; the reader says so.
    if k is None:
        return [
            f'source "{request.name}": uncertainties are treated as 1 sigma; '
            "set coverage_factor = 1 to silence this, or to the k that the source states"
        ]
    if k == 1:
        return []
    return [f'source "{request.name}": coverage factor {k:g}; uncertainties were divided by it']


def _to_lines(rows: FileRows, checked: CheckedRows, source: Source, file: int) -> LineList:
    """The good rows of one file, those of the isotopologues that were left out already excluded."""
    good = checked.good
    isotopologues: dict[str, int] = {}
    reasons = {"": 0}
    recoded = np.array([isotopologues.setdefault(name, len(isotopologues)) for name in checked.names], dtype=int)
    excluded = np.array([reasons.setdefault(reason, len(reasons)) for reason in rows.reasons], dtype=int)
    code = rows.isotopologue[good]
    same = np.zeros(len(code), dtype=int)
    return LineList(
        position=checked.position[good],
        sigma=checked.sigma[good],
        v_upper=rows.v_upper[good],
        j_upper=rows.j_upper[good],
        v_lower=rows.v_lower[good],
        j_lower=rows.j_lower[good],
        isotopologue=recoded[code],
        source=same,
        file=same + file,
        row=rows.row[good],
        exclusion=excluded[code],
        isotopologues=tuple(isotopologues),
        sources=(source,),
        reasons=tuple(reasons),
    )
