"""The choice of lines: what is understood, and that nothing else is."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.errors import UsageError
from dunhamfit.lines.choice import parse_choice
from dunhamfit.lines.line_list import LineList, Source

LINES = LineList(
    position=[1500.0, 740.0, 12.5, 2200.0],
    sigma=[1e-4, 2e-4, 1e-6, 1e-3],
    v_upper=[2, 1, 0, 3],
    j_upper=[1, 9, 21, 4],
    v_lower=[0, 0, 0, 0],
    j_lower=[0, 10, 20, 5],
    isotopologue=[0, 0, 1, 1],
    source=[0, 0, 0, 0],
    file=[0, 0, 0, 0],
    row=[1, 2, 3, 4],
    exclusion=[0, 0, 0, 0],
    isotopologues=("28Si32S", "29Si32S"),
    sources=(Source("invented"),),
)


@pytest.mark.parametrize(
    ("text", "chosen"),
    [
        ("v_upper <= 2", [0, 1, 2]),
        ("1 <= v_upper <= 2", [0, 1]),
        ("v_upper == 2 or j_lower > 15", [0, 2]),
        ("not v_upper == 2", [1, 2, 3]),
        ("not (v_upper == 2 or v_upper == 1)", [2, 3]),
        ('branch == "P"', [1, 3]),
        ('"P" != branch and v_upper < 2', [2]),
        ("isotopologue == '29Si32S'", [2, 3]),
        ("isotopologue == '30Si32S'", []),
        ("position > 1.4e3 and sigma < 5e-4", [0]),
        ("j_upper > j_lower", [0, 2]),
        ("position > -1", [0, 1, 2, 3]),
        ("1 < 2", [0, 1, 2, 3]),
        (" (v_lower != 0) ", []),
    ],
)
def test_choices(text, chosen):
    assert np.flatnonzero(parse_choice(text).mask(LINES)).tolist() == chosen


@pytest.mark.parametrize(
    "text",
    [
        "",
        "v_upper",
        "v_upper <",
        "v_upper = 5",
        "v_upper <= 5; import os",
        "__import__('os').system('true')",
        "v_upper.real < 5",
        "v_upper[0] < 5",
        "v_upper + 1 < 5",
        "v_upper in (1, 2)",
        "v_upper is 5",
        "weight < 5",
        "v_upper < 'five'",
        "isotopologue < '28Si32S'",
        "isotopologue == 5",
        "v_upper < True",
        "v_upper < 5j",
        "v_upper < 1e999",
        "v_upper < None",
        "branch == b'P'",
        "isotopologue == -'28Si32S'",
        "(lambda: 1)() < 5",
        "[v_upper < 5 for x in y]",
        "(v_upper < 5) if 1 else 2",
        "v_upper < 5" + " and v_upper < 5" * 60,
        "(" * 400 + "1" + ")" * 90,
        "not " * 120,
        "v_upper < 5\0",
        "5or v_upper < 5 or 1",
        "branch == '\\d'.x",
    ],
)
def test_everything_else_is_refused_with_what_is_allowed(text):
    with pytest.raises(UsageError, match="a choice of lines compares position, sigma, v_upper"):
        parse_choice(text)


def test_the_message_names_the_mistake():
    with pytest.raises(UsageError, match=r"'use' = 'weight < 5': 'weight' is not known; a choice"):
        parse_choice("weight < 5")
    with pytest.raises(UsageError, match="at most 500 characters"):
        parse_choice("v_upper < 5" + " " * 500)


@given(st.text(st.sampled_from("v_uperj lowand not()<=>!0123456789.'\"-"), max_size=40))
def test_any_text_is_a_choice_or_a_refusal(text):
    try:
        choice = parse_choice(text)
    except UsageError:
        return
    assert choice.mask(LINES).dtype == bool
