"""What does not print is shown as Python would write it in a literal."""

from __future__ import annotations

import ast

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.show.escape import escape_controls

# Every code point, lone surrogates included (they stand for undecodable bytes in file names).
any_text = st.text(st.characters(exclude_categories=[]))


@given(any_text)
def test_the_result_prints_and_encodes(text):
    shown = escape_controls(text)
    assert shown.isprintable()
    shown.encode("utf-8")


@given(any_text.filter(lambda text: "\\" not in text and '"' not in text))
def test_the_escapes_are_those_of_python(text):
    assert ast.literal_eval(f'"{escape_controls(text)}"') == text


@given(any_text)
def test_twice_is_once(text):
    assert escape_controls(escape_controls(text)) == escape_controls(text)


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("R(12) of 13C16O", "R(12) of 13C16O"),
        ("Grüße, σ = 3 µm", "Grüße, σ = 3 µm"),
        ("a\x1b]0;title\x07b", r"a\x1b]0;title\x07b"),
        ("a\r\nb\tc", r"a\r\nb\tc"),
        ("csi \x9b31m", r"csi \x9b31m"),
        ("\N{RIGHT-TO-LEFT OVERRIDE}vsc.", r"\u202evsc."),
        ("thin\N{THIN SPACE}space", r"thin\u2009space"),
        (r"C:\lines", r"C:\lines"),
    ],
)
def test_cases(text, shown):
    assert escape_controls(text) == shown


def test_line_feeds_stay_where_they_are_wanted():
    assert escape_controls("a\nb\r", keep_newlines=True) == "a\nb\\r"
