"""Tables: every cell whole, in any width."""

from __future__ import annotations

import csv
import io
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.show.escape import escape_controls
from dunhamfit.show.numbers import format_value
from dunhamfit.show.tables import Column, Table, records_to_csv, to_csv, to_text

ANSI = re.compile(r"\x1b\[[0-9;]*m")

# Words without blanks, so that what wraps can be put together again; control characters included.
words = st.text(st.characters(codec="ascii", exclude_characters=" "), min_size=1, max_size=30)
sentences = st.lists(words, max_size=12).map(" ".join)
numbers = st.builds(
    format_value, st.floats(-1e12, 1e12), st.floats(1e-12, 1e3), digits=st.integers(1, 3)
) | st.sampled_from(["", "-", "fixed", "nan"])


@st.composite
def tables(draw, text=sentences):
    columns = tuple(
        Column(draw(words), align, draw(st.sampled_from(["", "cm-1"])))
        for align in draw(st.lists(st.sampled_from(["left", "right", "decimal"]), min_size=1, max_size=8))
    )
    cells = st.tuples(*(text if column.align == "left" else numbers for column in columns))
    rows = tuple(draw(st.lists(cells, min_size=1, max_size=6)))
    return Table(draw(text), columns, rows, tuple(draw(st.lists(text, max_size=2))), keys=draw(st.integers(1, 2)))


@given(table=tables(), width=st.integers(20, 200))
def test_no_number_is_ever_cut(table, width):
    lines = to_text(table, width=width).splitlines()
    for i, column in enumerate(table.columns):
        for cell in (row[i] for row in table.rows if column.align != "left" and row[i]):
            # Whole, and with nothing but a blank or the edge beside it.
            assert any(re.search(rf"(?<!\S){re.escape(cell)}(?!\S)", line) for line in lines)


@given(table=tables(), width=st.integers(20, 200))
def test_no_character_of_a_text_is_lost(table, width):
    """What a column of text holds stands in the output, read downwards."""
    shown = "".join(to_text(table, width=width).split())
    for text in (table.title, *table.notes):
        assert "".join(escape_controls(text).split()) in shown
    for i, column in enumerate(table.columns):
        if column.align == "left":
            alone = Table("", (column,), tuple((row[i],) for row in table.rows))
            below_rule = to_text(alone, width=width).partition("─\n")[2]
            assert "".join(below_rule.split()) == "".join(
                "".join(escape_controls(row[i]).split()) for row in table.rows
            )


@given(table=tables(), width=st.integers(20, 200))
def test_lines_are_longer_than_the_terminal_only_where_two_columns_do_not_fit(table, width):
    # Key columns and one more, at their narrowest: text 24 characters, numbers their longest cell (20 more
    # for lining up points), headings their longest word.
    narrowest = [
        max(
            [24 if column.align == "left" else 0]
            + [len(word) for word in (*escape_controls(column.name).split(), f"({column.unit})")]
            + [len(cell) + 20 for row in table.rows for cell in [row[i]] if column.align != "left"]
        )
        for i, column in enumerate(table.columns)
    ]
    keys, others = narrowest[: table.keys], narrowest[table.keys :]
    unavoidable = sum(keys) + 2 * len(keys) + max(others, default=0)
    assert max(map(len, to_text(table, width=width).splitlines()), default=0) <= max(width, unavoidable)


@given(table=tables(), width=st.integers(20, 200))
def test_plain_text_has_no_control_characters_and_colour_changes_nothing_else(table, width):
    plain = to_text(table, width=width)
    assert plain.replace("\n", "").isprintable()
    assert plain.endswith("\n")
    coloured = ANSI.sub("", to_text(table, width=width, colour=True))
    assert [line.rstrip() for line in coloured.splitlines()] == plain.splitlines()


@given(table=tables())
def test_csv_gives_the_cells_back(table):
    names, *rows = csv.reader(io.StringIO(to_csv(table)))
    assert names == [escape_controls(column.heading) for column in table.columns]
    assert rows == [[escape_controls(cell) for cell in row] for row in table.rows]


@given(st.lists(st.fixed_dictionaries({"v": st.integers(), "position": st.floats(allow_nan=False)}), min_size=1))
def test_records_keep_full_precision(records):
    rows = list(csv.DictReader(io.StringIO(records_to_csv(records))))
    assert [{"v": int(row["v"]), "position": float(row["position"])} for row in rows] == records


# --- examples -----------------------------------------------------------------------------------------

CONSTANTS = Table(
    "Constants of 28Si32S",
    (Column("term"), Column("value", "decimal", "cm-1"), Column("remark")),
    (
        ("Y10", "749.64581(12)", ""),
        ("Y20", "-2.5863(31)", "prior"),
        ("Y02", "-2.01032(12)e-07", ""),
        ("Y05", "-4.6e-23", "fixed"),
    ),
    ("Digits in parentheses: one standard uncertainty.",),
)

BANDS = Table(
    "Bands",
    (
        Column("isotopologue"),
        Column("band"),
        *(Column(name, "right") for name in ("lines", "used", "J min", "J max")),
        Column("rms", "decimal", "cm-1"),
        Column("weighted rms", "decimal"),
        Column("mean residual", "decimal", "cm-1"),
        Column("noise factor", "decimal"),
    ),
    tuple(
        ("28Si32S", f"{v}-0", "121", "120", "0", "60", "0.00012", "1.03", "-0.000012(34)", "1.02(7)") for v in (1, 2)
    ),
    keys=2,
)


def test_decimal_points_stand_below_each_other():
    lines = to_text(CONSTANTS, width=80).splitlines()
    rows = [line for line in lines if line.startswith("Y")]
    assert len({row.index(".") for row in rows}) == 1


def test_a_constants_table():
    # Written by hand.
    assert to_text(CONSTANTS, width=80).splitlines() == [
        "Constants of 28Si32S",
        "                  value",
        "term             (cm-1)  remark",
        "───────────────────────────────",
        "Y10   749.64581(12)",
        "Y20    -2.5863(31)       prior",
        "Y02    -2.01032(12)e-07",
        "Y05    -4.6e-23          fixed",
        "",
        "Digits in parentheses: one standard uncertainty.",
    ]


def test_a_table_too_wide_is_shown_in_panels_that_repeat_the_keys():
    panels = to_text(BANDS, width=60).split("\n\n")
    assert len(panels) == 2
    for panel in panels:
        lines = panel.splitlines()
        assert max(map(len, lines)) <= 60
        assert sum(line.startswith("28Si32S       1-0") for line in lines) == 1
    together = " ".join(" ".join(panels).split())
    for column in BANDS.columns:
        assert all(word in together for word in column.name.split())


def test_a_wide_terminal_takes_the_table_on_one_line_each():
    lines = to_text(BANDS, width=160).splitlines()
    assert len(lines) == 1 + 2 + 1 + 2
    assert "weighted rms" in lines[2]


def test_text_wraps_between_words_and_numbers_stay_on_the_first_line():
    columns = (Column("row"), Column("reason"), Column("size", "right"))
    table = Table("t", columns, (("7", "one two three four five", "12.5"),))
    assert to_text(table, width=27).splitlines()[3:] == ["7    one two three     12.5", "     four five"]


def test_an_empty_table_says_so():
    assert to_text(Table("Excluded lines", CONSTANTS.columns, ()), width=80) == "Excluded lines\n(no rows)\n"


def test_escapes_and_markup_in_files_are_plain_text():
    table = Table("[bold]t[/bold]", (Column("name"),), (("[red]x[/red] :smile: \x1b[2J",),))
    text = to_text(table, width=80)
    assert text.startswith("[bold]t[/bold]\n")
    assert r"[red]x[/red] :smile: \x1b[2J" in text


def test_wide_characters_keep_the_columns_straight():
    # East Asian wide characters take two columns each (Unicode Standard Annex 11).
    table = Table("t", (Column("name"), Column("n", "right")), (("光谱", "1"), ("abcd", "2")))
    assert to_text(table, width=80).splitlines()[-2:] == ["光谱  1", "abcd  2"]


def test_rows_must_fit_the_columns():
    with pytest.raises(ValueError, match=r"row 1 of table 't' needs 1 cells \(got 2\)"):
        Table("t", (Column("a"),), (("1",), ("1", "2")))


def test_records_must_be_alike():
    with pytest.raises(ValueError, match=r"record 1 must have the fields \['a'\] \(got \['b'\]\)"):
        records_to_csv([{"a": 1}, {"b": 2}])


def test_records_of_nothing_and_none():
    assert records_to_csv([]) == ""
    assert records_to_csv([{"a": None, "b": 0.1, "c": True}]) == "a,b,c\n,0.1,True\n"
