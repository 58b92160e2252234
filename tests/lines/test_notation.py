"""Printed numbers and labels: every notation once, and what is refused."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.lines.notation import PROBLEMS, branch_step, parse_label, parse_number, parse_numbers


@given(st.text(max_size=30), st.sampled_from([".", ","]))
def test_any_text_is_a_finite_number_or_a_problem(text, decimal):
    number = parse_number(text, decimal=decimal)
    assert bool(number.problem) != math.isfinite(number.value)
    assert number.problem == "" or number.problem in PROBLEMS


@given(st.text(max_size=12))
def test_any_text_is_a_label_or_is_not(text):
    label = parse_label(text)
    assert math.isnan(label.step) == math.isnan(label.j_lower)


@given(st.lists(st.floats(allow_nan=False, allow_infinity=False), min_size=1), st.sampled_from([".", ","]))
def test_columns_come_back_to_the_last_bit(values, decimal):
    texts = [repr(value).replace(".", decimal) for value in values]
    assert parse_numbers(texts, decimal=decimal).values.tolist() == values
    # The same column, forced through the reading cell by cell.
    assert parse_numbers([*texts, "abc"], decimal=decimal).values.tolist()[:-1] == values


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("2143.2711", 2143.2711),
        (" 2143.2711 ", 2143.2711),
        ("+12", 12.0),
        ("-12", -12.0),
        ("−12.5", -12.5),  # U+2212
        ("− 12.5", -12.5),
        (".5", 0.5),
        ("5.", 5.0),
        # Groups of three digits, SI brochure, 9th edition, section 5.4.4 (43 279.168 29 is its example).
        ("43 279.168 29", 43279.16829),
        ("43\u2009279.168\u200929", 43279.16829),
        ("43\u202f279,168\u202f29".replace(",", "."), 43279.16829),
        ("2\u00a0147.081\u00a0132", 2147.081132),
        ("2147.081\u2009132", 2147.081132),
        ("1.2e-4", 1.2e-4),
        ("1.2D-04", 1.2e-4),
        ("1.2E+3", 1200.0),
    ],
)
def test_plain_notations(text, value):
    number = parse_number(text)
    assert (number.value, number.mark, number.problem) == (value, "", "")
    assert math.isnan(number.error)


@pytest.mark.parametrize(
    ("text", "value", "error"),
    [
        ("2143.2711(12)", 2143.2711, 0.0012),
        ("2143.2711 (12)", 2143.2711, 0.0012),
        ("115271(5)", 115271.0, 5.0),
        ("2143.2711(1)", 2143.2711, 0.0001),
        ("12.3(1.2)", 12.3, 1.2),  # the decimals of the value: it can only mean 1.2
        ("1.2345(12)e3", 1234.5, 1.2),
        ("−0.50(3)", -0.5, 0.03),
        # CODATA 2018 value of the electron mass in u, 5.485 799 090 65(16)e-4 (Tiesinga et al. 2021).
        ("5.485 799 090 65(16)e-4", 5.48579909065e-4, 1.6e-14),
    ],
)
def test_uncertainty_in_parentheses(text, value, error):
    number = parse_number(text)
    assert (number.value, number.error, number.problem) == (value, pytest.approx(error, rel=1e-15), "")


@pytest.mark.parametrize(
    ("text", "mark"),
    [
        ("2143.2711*", "*"),
        ("2143.2711 *", "*"),
        ("2143.2711†", "†"),
        ("2143.2711a", "a"),
        ("2143.2711^b", "^b"),
        ("2143.2711(a)", "(a)"),
        ("2143.2711[2]", "[2]"),
        ("2143.2711²", "²"),
        ("2143.2711(12)*", "*"),
    ],
)
def test_footnote_marks_are_reported(text, mark):
    number = parse_number(text)
    assert (number.value, number.mark, number.problem) == (2143.2711, mark, "")


def test_footnote_marks_are_counted():
    column = parse_numbers(["1.0*", "2.0*", "3.0a", "4.0"])
    assert column.marks == {"*": 2, "a": 1}
    assert column.values.tolist() == [1, 2, 3, 4]


@pytest.mark.parametrize(
    ("text", "problem"),
    [
        ("", "blank"),
        (" \u2009", "blank"),
        ("-", "missing"),
        ("n/a", "missing"),
        ("N/A", "missing"),
        ("...", "missing"),
        ("nan", "not finite"),
        ("-inf", "not finite"),
        ("1e999", "not finite"),
        ("2143,2711", "comma"),
        ("1_000", "not a number"),
        ("1.2.3", "not a number"),
        ("abc", "not a number"),
        ("2147.08 0.0001", "not a number"),
        ("2147 1", "not a number"),  # no group of three
        ("12.34(1.2)", "not a number"),  # 0.012 or 1.2?
        ("٣", "not a number"),  # a digit, but not one that tables of lines are printed with
        ("٣٤.٥", "not a number"),
    ],
)
def test_what_is_no_number(text, problem):
    assert parse_number(text).problem == problem
    assert list(parse_numbers([text]).problems.values()) == [problem]


def test_decimal_comma_where_it_is_declared():
    assert parse_number("2143,2711(12)", decimal=",").value == 2143.2711
    assert parse_number("2 143,271 1", decimal=",").value == 2143.2711
    assert parse_number("2143.2711", decimal=",").problem == "full stop"
    assert parse_number("2.143,2711", decimal=",").problem == "full stop"
    assert parse_numbers(["1,5", "1.5"], decimal=",").problems == {1: "full stop"}


@pytest.mark.parametrize(
    ("text", "step", "j_lower", "mark"),
    [
        ("R(12)", 1, 12, ""),
        ("P(3)", -1, 3, ""),
        ("P 3", -1, 3, ""),
        ("p3", -1, 3, ""),
        (" R( 0) ", 1, 0, ""),
        ("Q(7)", 0, 7, ""),
        ("S(1)", 2, 1, ""),
        ("O(4)", -2, 4, ""),
        ("R(2.5)", 1, 2.5, ""),
        ("P(−3)", -1, -3, ""),
        ("R(12)*", 1, 12, "*"),
    ],
)
def test_labels(text, step, j_lower, mark):
    assert parse_label(text) == (step, j_lower, mark)


@pytest.mark.parametrize("text", ["", "R", "12", "X(12)", "R(12", "R12)", "R(x)", "RR(12)", "R(1 2)"])
def test_what_is_no_label(text):
    assert math.isnan(parse_label(text).step)


def test_branch_letters():
    assert [branch_step(letter) for letter in "PQR"] == [-1, 0, 1]
    assert branch_step(" r ") == 1
    assert math.isnan(branch_step("T"))
