"""Delimited text: bytes of one file in, columns of rows out, block by block."""

from __future__ import annotations

import io
from collections import Counter
from collections.abc import Iterator
from itertools import compress, islice
from operator import not_

import numpy as np

from dunhamfit.lines.faults import Fault, visible
from dunhamfit.lines.layout import Layout, find_layout, split_rows
from dunhamfit.lines.notation import PROBLEMS, NumberColumn, branch_step, parse_label, parse_numbers
from dunhamfit.lines.request import DELIMITERS, SourceRequest
from dunhamfit.lines.rows import NUMBERS, FileRows, no_rows

BLOCK = 1 << 16
SAMPLE = 50
_UTF16_MARKS = (b"\xff\xfe", b"\xfe\xff")

Row = tuple[int, str]  # line number and text


def read_delimited(data: bytes, shown: str, request: SourceRequest) -> FileRows:
    """The rows of one delimited file.

    Parameters
    ----------
    data : bytes
        The whole file.
    shown : str
        The file as the user named it.
    """
    fault = _check_encoding(data, shown)
    if fault:
        return no_rows(shown, [fault])
    blocks = _blocks(data, request.comment)
    block = next(blocks, [])
    if not block:
        return no_rows(shown, [])
    layout = find_layout(block[:SAMPLE], request, shown)
    if layout.faults:
        count = len(block) + sum(map(len, blocks)) - layout.has_header
        return no_rows(shown, layout.faults, count=count)
    reader = _Reader(layout, request, shown)
    reader.take(block[1:] if layout.has_header else block)
    for block in blocks:
        reader.take(block)
    return reader.finish()


def _check_encoding(data: bytes, shown: str) -> Fault | None:
    if data.startswith(_UTF16_MARKS) or b"\0" in data:
        kind = "UTF-16 text" if data.startswith(_UTF16_MARKS) else "not text: it holds zero bytes"
        what, remedy = f"the file is {kind}", "save it as UTF-8 text"
        return Fault(shown, 0, what, "plain UTF-8 text was expected", remedy)
    try:
        data.decode("utf-8")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        what = f"byte 0x{data[error.start]:02x} is not UTF-8"
        return Fault(shown, line, what, "the file is binary or in another encoding", "save it as UTF-8 text")
    return None


def _blocks(data: bytes, comment: tuple[str, ...]) -> Iterator[list[Row]]:
    """Rows in blocks, without comments and empty lines."""
    special = {",", ";", *(mark[0] for mark in comment)}
    lines = enumerate(io.TextIOWrapper(io.BytesIO(data), encoding="utf-8-sig"), start=1)
    while part := list(islice(lines, BLOCK)):
        block = []
        for number, text in part:
            bare = text.strip()
            if bare and (bare[0] not in special or _holds_data(bare, comment)):
                block.append((number, text))
        if block:
            yield block


def _holds_data(bare: str, comment: tuple[str, ...]) -> bool:
    """False for a comment, and for the rows of bare delimiters with which a spreadsheet ends its table."""
    return not bare.startswith(comment) and bare.strip(",;\t ") != ""


class _Reader:
    """Collects the columns, faults and notices of one file while its blocks go by."""

    def __init__(self, layout: Layout, request: SourceRequest, shown: str):
        self.layout = layout
        self.request = request
        self.shown = shown
        self.count = 0
        self.parts: list[dict[str, np.ndarray]] = []
        self.faults: list[Fault] = []
        self.names: dict[str, int] = {}
        self.marks: Counter[str] = Counter()
        self.missing: dict[int, str] = {}  # Line number to a text such as "n/a" in place of an uncertainty.

    def take(self, block: list[Row]) -> None:
        """Read one block of rows."""
        self.count += len(block)
        lines, cells = self._split(block)
        if not cells:
            return
        part = {"row": np.array(lines), "readable": np.ones(len(lines), dtype=bool)}
        position = self._numbers(part, "position", cells)
        part["position"] = position.values
        part["uncertainty"] = self._uncertainty(part, cells, position)
        levels = self.request.levels
        for place, key in enumerate(("v_upper", "v_lower")):
            given = levels is not None
            part[key] = np.full(len(cells), levels[place], float) if given else self._numbers(part, key, cells).values
        part["j_upper"], part["j_lower"] = self._rotation(part, cells)
        part["isotopologue"] = self._isotopologue(part, cells)
        self.parts.append(part)

    def finish(self) -> FileRows:
        """All columns in one piece, with the uncertainties of the source where a line has none."""
        if not self.parts:
            return no_rows(self.shown, self.faults, count=self.count)
        columns = {key: np.concatenate([part[key] for part in self.parts]) for key in self.parts[0]}
        notices = self._fill_uncertainty(columns)
        if self.marks:
            listed = ", ".join(f"{visible(mark)} ({count})" for mark, count in sorted(self.marks.items()))
            notices.append(f"{self.shown}: footnote marks were passed over: {listed}")
        names = tuple(self.names)
        return FileRows(
            shown=self.shown,
            count=self.count,
            **{key: columns[key] for key in (*NUMBERS, "row", "isotopologue", "readable")},
            names=names,
            reasons=("",) * len(names),
            by_branch=self.layout.j_form in (("branch", "j_lower"), ("label",)),
            faults=tuple(self.faults),
            notices=tuple(notices),
        )

    def _fault(self, part, index: int, what: str, why: str, remedy: str) -> None:
        part["readable"][index] = False
        self.faults.append(Fault(self.shown, int(part["row"][index]), what, why, remedy))

    def _split(self, block: list[Row]) -> tuple[list[int], list[list[str]]]:
        """Line numbers and cells of the rows that have the right number of cells."""
        width = self.layout.width
        rows = split_rows([text for _, text in block], self.layout.delimiter)
        whole = [len(row) == width for row in rows]
        for (number, text), row in compress(zip(block, rows, strict=True), map(not_, whole)):
            columns = "1 column" if len(row) == 1 else f"{len(row)} columns"
            what = f"{columns}, expected {width}" if row else "a quote does not close"
            remedy = f"{self._mixture(text)}correct the row or make it a comment"
            self.faults.append(Fault(self.shown, number, what, f'the text is "{visible(text)}"', remedy))
        return [number for number, _ in compress(block, whole)], list(compress(rows, whole))

    def _mixture(self, text: str) -> str:
        """A question about a second delimiter in the row, or an empty text."""
        own = self.layout.delimiter
        not_meant = {own, self.request.decimal} | ({"\t"} if own == " " else set())
        others = [name for name, sign in DELIMITERS.items() if sign in text.strip() and sign not in not_meant]
        names = {sign: name for name, sign in DELIMITERS.items()}
        return f"mixed {others[0]} and {names[own]}? " if others else ""

    def _texts(self, key: str, cells: list[list[str]]) -> list[str]:
        column = self.layout.column[key]
        return [row[column] for row in cells]

    def _numbers(self, part, key: str, cells, *, may_lack: bool = False) -> NumberColumn:
        """One column of numbers; with `may_lack`, blank and missing ones are NaN without a fault."""
        texts = self._texts(key, cells)
        numbers = parse_numbers(texts, decimal=self.request.decimal)
        self.marks.update(numbers.marks)
        for index, problem in numbers.problems.items():
            if may_lack and problem in ("blank", "missing"):
                continue
            said = {"blank": "is blank", "missing": "is missing", "not finite": "is not finite"}
            fallback = "is not a number" if problem == "not a number" else f"has a {problem}"
            shown = "" if problem == "blank" else f' "{visible(texts[index])}"'
            self._fault(part, index, f"{key}{shown} {said.get(problem, fallback)}", *PROBLEMS[problem])
        return numbers

    def _uncertainty(self, part, cells, position: NumberColumn) -> np.ndarray:
        """From a column, from the digits in parentheses after the position, or NaN."""
        if "uncertainty" not in self.layout.column:
            part["may_fill"] = np.isnan(position.errors) & ~np.isnan(position.values)
            return position.errors
        column = self._numbers(part, "uncertainty", cells, may_lack=True)
        lacking = np.zeros(len(cells), dtype=bool)
        for index, problem in column.problems.items():
            lacking[index] = problem in ("blank", "missing")
            if problem == "missing":
                self.missing[int(part["row"][index])] = visible(cells[index][self.layout.column["uncertainty"]])
        both = ~np.isnan(column.values) & ~np.isnan(position.errors)
        # Both are printed with one or two digits, so agreement to 1e-9 means the same digits.
        differ = both & ~np.isclose(column.values, position.errors, rtol=1e-9, atol=0)
        for index in np.flatnonzero(differ):
            two = f"{column.values[index]:.6g} and {position.errors[index]:.6g}"
            what = f"uncertainties {two} stand in the column and after the position"
            self._fault(part, index, what, "a line has one uncertainty", "keep one of them")
        part["may_fill"] = lacking & np.isnan(position.errors)
        return np.where(lacking, position.errors, column.values)

    def _fill_uncertainty(self, columns: dict[str, np.ndarray]) -> list[str]:
        """Give the uncertainty of the source to lines without one; fault them if the source states none."""
        lacking = columns["may_fill"]
        stated = self.request.uncertainty
        if not lacking.any():
            return []
        if stated is not None:
            columns["uncertainty"][lacking] = stated
            if lacking.all():
                return []
            taken = f"the {stated:g} {self.request.unit} of the source"
            return [f"{self.shown}: lines without an uncertainty that took {taken}: {lacking.sum()}"]
        why, remedy = "a line without an uncertainty has no weight", "set uncertainty for the source"
        if "uncertainty" not in self.layout.column and np.isnan(columns["uncertainty"]).all():
            remedy += " or map a column to it"
            self.faults.append(Fault(self.shown, 0, "no uncertainties", why, remedy))
            columns["readable"][:] = False
            return []
        for index in np.flatnonzero(lacking):
            said = self.missing.get(int(columns["row"][index]))
            what = f'uncertainty "{said}" is missing' if said else "uncertainty is blank"
            self._fault(columns, index, what, why, f"give the value or {remedy}")
        return []

    def _rotation(self, part, cells) -> tuple[np.ndarray, np.ndarray]:
        """J' and J'' of the rows, NaN where they cannot be read."""
        form = self.layout.j_form
        if form == ("label",):
            return self._labels(part, cells)
        if form == ("m",):
            return self._m(part, cells)
        j_lower = self._numbers(part, "j_lower", cells).values
        if form == ("j_upper", "j_lower"):
            return self._numbers(part, "j_upper", cells).values, j_lower
        texts = self._texts("branch", cells)
        steps = {text: branch_step(text) for text in set(texts)}
        step = np.array([steps[text] for text in texts])
        for index in np.flatnonzero(np.isnan(step)):
            what = f'branch "{visible(texts[index])}" is not known'
            self._fault(part, index, what, "P or R was expected", "correct the letter or the column map")
        return j_lower + step, j_lower

    def _labels(self, part, cells) -> tuple[np.ndarray, np.ndarray]:
        texts = self._texts("label", cells)
        known = {text: parse_label(text) for text in set(texts)}
        labels = [known[text] for text in texts]
        self.marks.update(label.mark for label in labels if label.mark)
        step = np.array([label.step for label in labels])
        j_lower = np.array([label.j_lower for label in labels])
        for index in np.flatnonzero(np.isnan(step)):
            what = f'label "{visible(texts[index])}" is not understood'
            why = "a label such as R(12) or P(3) was expected"
            self._fault(part, index, what, why, "correct the label or the column map")
        return j_lower + step, j_lower

    def _m(self, part, cells) -> tuple[np.ndarray, np.ndarray]:
        """m = -J'' counts the P branch, m = J'' + 1 the R branch (common practice)."""
        m = self._numbers(part, "m", cells).values
        with np.errstate(invalid="ignore"):
            wrong = (m == 0) | (m != np.floor(m))
        for index in np.flatnonzero(wrong & ~np.isnan(m)):
            why = "P lines have m=-J'' and R lines m=J''+1, so m is a whole number other than 0"
            self._fault(part, index, f"m={m[index]:g} is no line", why, "correct it or the column map")
        m = np.where(wrong, np.nan, m)
        return np.where(m > 0, m, -m - 1), np.where(m > 0, m - 1, -m)

    def _isotopologue(self, part, cells) -> np.ndarray:
        default = self.request.isotopologue or ""
        if "isotopologue" not in self.layout.column:
            return np.full(len(cells), self.names.setdefault(default, len(self.names)))
        texts = [text.strip() or default for text in self._texts("isotopologue", cells)]
        code = np.array([self.names.setdefault(text, len(self.names)) if text else -1 for text in texts])
        for index in np.flatnonzero(code < 0):
            why, remedy = "every line belongs to one", "give the name or set isotopologue for the source"
            self._fault(part, index, "isotopologue is blank", why, remedy)
        return code
