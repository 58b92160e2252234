"""How one delimited file is laid out: delimiter, header, and which column holds what."""

from __future__ import annotations

import csv
import re
from collections import Counter
from dataclasses import dataclass
from difflib import get_close_matches

from dunhamfit.lines.faults import Fault, visible
from dunhamfit.lines.notation import parse_number
from dunhamfit.lines.request import COLUMNS, J_FORMS, SourceRequest

_BLANKS = re.compile(r"[ \t]+")


@dataclass(frozen=True)
class Layout:
    """The layout of one delimited file.

    Attributes
    ----------
    delimiter : str
        The character; a blank stands for any run of blanks and tabs.
    has_header : bool
    width : int
        Cells that every row must have.
    column : dict of str to int
        From the names in `COLUMNS` to the index of the cell, for those present.
    j_form : tuple of str
        The member of `J_FORMS` by which J is given.
    faults : tuple of Fault
        Why the file cannot be read at all; `column` is then of no use.
    """

    delimiter: str
    has_header: bool
    width: int
    column: dict[str, int]
    j_form: tuple[str, ...] = ()
    faults: tuple[Fault, ...] = ()


def split_rows(texts: list[str], delimiter: str) -> list[list[str]]:
    """The cells of every row; quotes may enclose a cell. A quote that does not close gives an empty list."""
    if delimiter != " ":
        rows = [text.rstrip("\r\n").split(delimiter) for text in texts]
    else:
        # str.split takes the thin space of a digit group for a delimiter.
        rows = [text.split() if text.isascii() else _BLANKS.split(text.strip(" \t\r\n")) for text in texts]
    for index, text in enumerate(texts):
        if '"' in text:
            rows[index] = _split_quoted(text, delimiter)
    return rows


def _split_quoted(text: str, delimiter: str) -> list[str]:
    bare = text.strip(" \t\r\n") if delimiter == " " else text.rstrip("\r\n")
    try:
        return next(csv.reader([bare], delimiter=delimiter, skipinitialspace=True, strict=True), [])
    except csv.Error:
        return []


def find_layout(sample: list[tuple[int, str]], request: SourceRequest, shown: str) -> Layout:
    """The layout of a file from its first rows, as (line number, text); `sample` is not empty."""
    delimiter = request.delimiter or _guess_delimiter([text for _, text in sample], request.decimal)
    rows = split_rows([text for _, text in sample], delimiter)
    first = rows[0]
    common = Counter(map(len, rows)).most_common(1)[0][0]
    named = _is_named(first, request)
    has_header = request.header
    if has_header is None:
        # A title above the table has words too, but not as many cells.
        words = not any(_is_number(cell, request.decimal) for cell in first)
        has_header = named or (words and len(first) == common)
    header = [cell.strip() for cell in first] if has_header else []
    width = len(header) if header and named else common
    column, faults = _find_columns(header, width, request, shown, sample[0][0] if has_header else 0)
    j_form = next((form for form in J_FORMS if set(form) <= set(column)), ())
    if not faults:
        faults = _find_missing(column, j_form, request, shown, header)
    return Layout(delimiter, has_header, width, column, j_form, tuple(faults))


def _is_named(first: list[str], request: SourceRequest) -> bool:
    """Whether columns are found by name: by those of the map, or without a map by our own."""
    if request.columns is None:
        return any(cell.strip() in COLUMNS for cell in first)
    return any(isinstance(column, str) for column in request.columns.values())


def _guess_delimiter(texts: list[str], decimal: str) -> str:
    """The first of tab, semicolon and comma that most rows hold, else blanks."""
    for candidate in ("\t", ";", ","):
        if candidate != decimal and sum(candidate in text.strip() for text in texts) > len(texts) / 2:
            return candidate
    return " "


def _is_number(cell: str, decimal: str) -> bool:
    number = parse_number(cell, decimal=decimal)
    return number.problem in ("", "comma", "full stop") and not number.mark


def _find_columns(
    header: list[str], width: int, request: SourceRequest, shown: str, line: int
) -> tuple[dict[str, int], list[Fault]]:
    """The index of every column that the map names, or that the header names in our own words."""
    own = {key: key for key in COLUMNS if key in header}
    wanted = own if request.columns is None else request.columns
    column: dict[str, int] = {}
    faults: list[Fault] = []
    for key, where in wanted.items():
        if isinstance(where, int):
            if where <= width:
                column[key] = where - 1
                continue
            what, why = f"column {where} ({key}) does not exist", f"the rows have {width} columns"
            remedy = "correct the column number or the delimiter"
        elif not header:
            what, why = f'column "{visible(where)}" ({key}) cannot be found', "the file has no header"
            remedy = "give the number of the column"
        elif header.count(where) > 1:
            what = f'column "{visible(where)}" ({key}) stands twice in the header'
            why, remedy = "either could be meant", "give the number of the column"
        elif where in header:
            column[key] = header.index(where)
            continue
        else:
            close = get_close_matches(where, header, n=1)
            what = f'column "{visible(where)}" ({key}) is not in the header'
            why = f"the header reads {_listed(header)}"
            hint = f'did you mean "{visible(close[0])}"? ' if close else ""
            remedy = f"{hint}correct the column map"
        faults.append(Fault(shown, line, what, why, remedy))
    return column, faults


def _find_missing(
    column: dict[str, int], j_form: tuple[str, ...], request: SourceRequest, shown: str, header: list[str]
) -> list[Fault]:
    """Faults for the columns without which no row can be read."""
    if not column:
        why = f"the header reads {_listed(header)}" if header else "the file has no header"
        example = 'position = "nu"' if header else "position = 1"
        remedy = f"give a column map such as {{ {example}, ... }}"
        return [Fault(shown, 0, "which column holds what is not said", why, remedy)]
    faults = [
        Fault(shown, 0, f"no column for {key}", "every line needs it", f"name {key} in the column map")
        for key in ("position", "v_upper", "v_lower")
        if key not in column and not (request.band and key != "position")
    ]
    if not j_form:
        why = "J is given as j_upper with j_lower, branch with j_lower, label, or m"
        faults.append(Fault(shown, 0, "no columns for J", why, "name them in the column map"))
    if "isotopologue" not in column and not request.isotopologue:
        why, remedy = "neither the source nor a column names it", "set isotopologue for the source"
        faults.append(Fault(shown, 0, "no isotopologue", why, remedy))
    return faults


def _listed(header: list[str]) -> str:
    return visible(" | ".join(header), at_most=200)
