"""Tables as rows of text, and their layout for a terminal and for CSV.

A table is made once, as rows, and rendered afterwards, so that the terminal, the CSV
file and the paper (`dunhamfit.show.latex`) say the same. On a terminal no cell is ever
cut: text columns wrap between words, number columns never shrink below their cells, and
a table that is still too wide is shown in panels that repeat its leading columns.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from rich import box
from rich.cells import cell_len
from rich.console import Console
from rich.table import Table as RichTable
from rich.text import Text

from dunhamfit.show.escape import escape_controls

_GAP = 2  # blanks between columns
# A text column is not squeezed below this, so that labels stay on one line and sentences wrap,
_LABEL = 16
# nor below its longest word, unless that word (a path, a hash) is longer than this.
_WORD = 24
# Notes are sentences; longer lines than this are hard to read however wide the terminal is.
_NOTE_WIDTH = 100

_WHOLE_PART = re.compile(r"[-+]?\d+")


@dataclass(frozen=True)
class Column:
    """One column.

    Attributes
    ----------
    name : str
    align : "left" for text, "right" for counts, "decimal" for numbers lined up by their decimal points
    unit : str
        Shown under the name in parentheses; empty for none.
    """

    name: str
    align: Literal["left", "right", "decimal"] = "left"
    unit: str = ""

    @property
    def heading(self) -> str:
        """Name and unit on one line."""
        return f"{self.name} ({self.unit})" if self.unit else self.name


@dataclass(frozen=True)
class Table:
    """Rows of text under columns, with a title and notes.

    Attributes
    ----------
    title : str
    columns : tuple of Column
    rows : tuple of tuple of str, each as long as `columns`
    notes : tuple of str
        Sentences shown under the table.
    keys : int
        How many leading columns say what a row is; they are repeated in every panel of a
        table that is too wide for the terminal.

    Raises
    ------
    ValueError
        If a row has another number of cells than there are columns.
    """

    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[str, ...], ...]
    notes: tuple[str, ...] = ()
    keys: int = 1

    def __post_init__(self):
        for number, row in enumerate(self.rows):
            if len(row) != len(self.columns):
                raise ValueError(
                    f"row {number} of table '{self.title}' needs {len(self.columns)} cells (got {len(row)})"
                )


@dataclass(frozen=True)
class _Block:
    """A column made ready for the terminal: escaped, lined up, and how narrow and wide it may be."""

    column: Column
    cells: tuple[str, ...]
    least: int
    natural: int


def to_text(table: Table, *, width: int, colour: bool = False) -> str:
    """The table for a terminal of `width` characters; ends with a line feed.

    Parameters
    ----------
    table : Table
    width : int, characters
        Lines are longer only where a single row label with one number already is.
    colour : bool
        Bold title and headings, by ANSI escapes; without it no control character is written.
    """
    parts = [_rendered(Text(escape_controls(table.title), style="bold"), width=width, colour=colour)]
    if not table.rows:
        parts.append("(no rows)\n")
    else:
        blocks = [_block(column, [row[i] for row in table.rows]) for i, column in enumerate(table.columns)]
        panels = _panels(blocks, keys=table.keys, width=width)
        parts.append("\n".join(_panel_text(panel, width=width, colour=colour) for panel in panels))
    if table.notes:
        parts.append("\n")
    note_width = min(width, _NOTE_WIDTH)
    parts += [_rendered(Text(escape_controls(note)), width=note_width, colour=colour) for note in table.notes]
    return "".join(parts)


def to_csv(table: Table) -> str:
    """Column headings and rows as comma-separated values (RFC 4180, with line feeds)."""
    return _csv_lines([[column.heading for column in table.columns], *table.rows])


def records_to_csv(records: Sequence[Mapping[str, object]]) -> str:
    """Flat records as comma-separated values, every number at full precision.

    Parameters
    ----------
    records : sequence of mappings with the same keys
        Floats are written so that the same double reads back; None as an empty field.

    Raises
    ------
    ValueError
        If a record has other keys than the first one.
    """
    if not records:
        return ""
    names = list(records[0])
    for number, record in enumerate(records):
        if set(record) != set(names):
            raise ValueError(f"record {number} must have the fields {names} (got {list(record)})")
    return _csv_lines([names, *([_csv_field(record[name]) for name in names] for record in records)])


def _csv_field(value: object) -> str:
    if value is None:
        return ""
    return repr(float(value)) if isinstance(value, float) else str(value)


def _csv_lines(rows: Iterable[Iterable[str]]) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerows([escape_controls(cell) for cell in row] for row in rows)
    return stream.getvalue()


def _block(column: Column, cells: Sequence[str]) -> _Block:
    column = Column(escape_controls(column.name), column.align, escape_controls(column.unit))
    cells = [escape_controls(cell) for cell in cells]
    if column.align == "decimal":
        cells = _lined_up(cells)
    headings = [column.name, f"({column.unit})"] if column.unit else [column.name]
    widest = max(cell_len(cell) for cell in cells)
    words = [cell_len(word) for text in headings for word in text.split()]
    natural = max([widest, *(cell_len(text) for text in headings)])
    if column.align == "left":
        words += [min(cell_len(word), _WORD) for cell in cells for word in cell.split()]
        widest = min(widest, _LABEL)
    least = max([widest, *words])
    return _Block(column, tuple(cells), least, natural)


def _lined_up(cells: Sequence[str]) -> list[str]:
    """Numbers padded on both sides so that their decimal points stand below each other."""
    before = [match.end() if (match := _WHOLE_PART.match(cell)) else len(cell) for cell in cells]
    left = [" " * (max(before) - n) + cell for n, cell in zip(before, cells, strict=True)]
    longest = max(len(cell) for cell in left)
    return [cell.ljust(longest) for cell in left]


def _panels(blocks: Sequence[_Block], *, keys: int, width: int) -> list[list[_Block]]:
    """Split columns into panels that fit `width`, each led by the key columns."""
    lead, rest = list(blocks[:keys]), blocks[keys:]
    panels = [lead]
    for block in rest:
        if len(panels[-1]) > len(lead) and _total([b.least for b in [*panels[-1], block]]) > width:
            panels.append(lead)
        panels[-1] = [*panels[-1], block]
    return panels


def _total(widths: Sequence[int]) -> int:
    return sum(widths) + _GAP * (len(widths) - 1)


def _widths(panel: Sequence[_Block], *, width: int) -> list[int]:
    """The least widths, then what is left: to headings that fit on one line with it, then to text evenly."""
    widths = [block.least for block in panel]
    spare = width - _total(widths)
    for i in sorted(range(len(panel)), key=lambda i: panel[i].natural - panel[i].least):
        wanted = panel[i].natural - widths[i]
        if panel[i].column.align != "left" and wanted <= spare:
            widths[i] += wanted
            spare -= wanted
    texts = [i for i, block in enumerate(panel) if block.column.align == "left"]
    while spare > 0 and (narrow := [i for i in texts if widths[i] < panel[i].natural]):
        for i in narrow[:spare]:
            widths[i] += 1
        spare -= len(narrow[:spare])
    return widths


def _panel_text(panel: Sequence[_Block], *, width: int, colour: bool) -> str:
    widths = _widths(panel, width=width)
    # The divider of the box is one blank, the padding makes up the rest of the gap.
    grid = RichTable(box=box.SIMPLE, padding=(0, _GAP - 1, 0, 0), pad_edge=False, show_edge=False)
    for block, column_width in zip(panel, widths, strict=True):
        heading = block.column.name + (f"\n({block.column.unit})" if block.column.unit else "")
        justify = "left" if block.column.align == "left" else "right"
        grid.add_column(Text(heading, justify=justify), width=column_width, overflow="fold")
    cells = [
        block.cells if block.column.align == "left" else [" " * (w - cell_len(c)) + c for c in block.cells]
        for block, w in zip(panel, widths, strict=True)
    ]
    for row in zip(*cells, strict=True):
        grid.add_row(*(Text(cell) for cell in row))
    return _rendered(grid, width=max(width, _total(widths)), colour=colour)


def _rendered(item: RichTable | Text, *, width: int, colour: bool) -> str:
    stream = io.StringIO()
    console = Console(
        file=stream,
        width=width,
        force_terminal=colour,
        color_system="standard" if colour else None,
        legacy_windows=False,
    )
    console.print(item, overflow="fold")
    return "".join(line.rstrip() + "\n" for line in stream.getvalue().splitlines())
