"""Faults as text: where, what, why, what to do; capped, counted and harmless on a terminal."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.errors import InputFaults
from dunhamfit.lines.faults import Fault, raise_faults, visible


def test_one_line_per_fault():
    assert str(Fault("a.csv", 3, "what", "why", "remedy")) == "a.csv:3: what, why, remedy"
    assert str(Fault("a.csv", 0, "what", "why", "remedy")) == "a.csv: what, why, remedy"


def test_no_faults_raise_nothing():
    raise_faults([], rows_fine=3)


def test_the_first_line_says_how_many_rows_are_fine():
    with pytest.raises(InputFaults) as caught:
        raise_faults([Fault("a.csv", 3, "what", "why", "remedy")], rows_fine=1)
    assert str(caught.value) == "1 row is fine; 1 fault, nothing was fitted:\na.csv:3: what, why, remedy"
    assert caught.value.exit_code == 3


@pytest.mark.parametrize(
    ("number", "last"),
    [(50, "a.csv:50: x, y, z"), (51, "... and 1 more fault"), (80, "... and 30 more faults")],
)
def test_fifty_are_shown_and_the_rest_counted(number, last):
    faults = [Fault("a.csv", line + 1, "x", "y", "z") for line in range(number)]
    with pytest.raises(InputFaults) as caught:
        raise_faults(faults, rows_fine=7)
    shown = str(caught.value).splitlines()
    assert shown[0] == f"7 rows are fine; {number} faults, nothing was fitted:"
    assert shown[-1] == last
    assert len(shown) == 1 + min(number, 50) + (number > 50)
    assert caught.value.faults == tuple(faults)


@given(st.text(max_size=100))
def test_shown_text_is_short_and_printable(text):
    shown = visible(text)
    assert shown.isprintable()
    assert len(shown) <= 60 * len(r"\U0010ffff")


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("  2147.08 ", "2147.08"),
        ("µm", "µm"),
        ("a\x1b[2Jb\x07", r"a\x1b[2Jb\x07"),
        ("a\u202eb", r"a\u202eb"),  # turns the reading direction round
        ("\udc80", r"\udc80"),  # an undecodable byte of a file name
        ("x" * 61, "x" * 57 + "..."),
    ],
)
def test_escapes(text, shown):
    assert visible(text) == shown
