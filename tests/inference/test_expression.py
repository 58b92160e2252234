"""Expressions of a job file: what is refused, and values and slopes against Python's own and numerical ones."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.errors import UsageError
from dunhamfit.inference.expression import Dual, parse_expression

NAMES = ("Y01", "Y10", "Y20")
FUNCTIONS = {"sqrt": mpmath.sqrt, "exp": mpmath.exp, "log": mpmath.log, "abs": abs}


def evaluated(text: str, values) -> Dual:
    known = {name: Dual(value, row) for name, value, row in zip(NAMES, values, np.eye(len(NAMES)), strict=True)}
    return parse_expression(text, names=NAMES).evaluate(known)


@pytest.mark.parametrize(
    "text",
    [
        "__import__('os').system('true')",
        "Y01.real",
        "Y01.__class__",
        "(lambda: Y01)()",
        "[Y01][0]",
        "Y01 if Y10 else Y20",
        "Y01 < Y10",
        "Y01 and Y10",
        "Y01 // Y10",
        "Y01 % 2",
        "~Y01",
        "f'{Y01}'",
        "'Y01'",
        "True",
        "1j",
        "(Y01 := 2)",
        "sin(Y01)",
        "sqrt(Y01, Y10)",
        "sqrt(x=Y01)",
        "sqrt(*Y01)",
        "open('f')",
        "[y for y in Y01]",
        "...",
        "None",
        "await Y01",
    ],
)
def test_anything_else_is_refused(text):
    with pytest.raises(UsageError, match=r"allowed are numbers, terms such as Y01"):
        parse_expression(text, names=NAMES)


@pytest.mark.parametrize("text", ["", "Y01 +", "Y01\x00", "Y01; Y10", "Y01 = 2", "(" * 240 + "Y01" + ")" * 240])
def test_text_that_is_no_expression_is_refused(text):
    with pytest.raises(UsageError, match="is not an expression; allowed are"):
        parse_expression(text, names=NAMES)


@pytest.mark.parametrize("name", ["Y02", "y01", "sqrt", "pi", "__builtins__"])
def test_a_name_that_is_not_in_the_model_is_refused(name):
    with pytest.raises(UsageError) as caught:
        parse_expression(f"2*{name}", names=NAMES)
    assert str(caught.value) == f"relation '2*{name}': {name} is not in the model; it has Y01, Y10, Y20"


@pytest.mark.parametrize("text", ["-" * 300 + "Y01", "+".join(["Y01"] * 100)])
def test_nesting_has_a_limit(text):
    with pytest.raises(UsageError, match="nested more than 60 levels deep; write it shorter"):
        parse_expression(text, names=NAMES)


@pytest.mark.parametrize("given", [3, None, "Y01+" * 130 + "Y01"])
def test_only_text_of_some_length_is_read(given):
    with pytest.raises(UsageError, match="must be text of at most 500 characters"):
        parse_expression(given, names=NAMES)


@pytest.mark.parametrize(
    "text",
    [
        "9**9**9**9",
        "Y01*9**9**9",
        "2" * 450,
        "exp(exp(exp(Y10)))",
        "1e999*Y01",
        "1e200*1e200*Y01",
        "Y01/(Y01 - Y01)",
        "sqrt(-Y01)",
        "sqrt(Y01 - Y01)",
        "log(0*Y01)",
        "(-Y01)**0.5",
        "(Y01 - Y01)**Y10",
        "1e999 - 1e999 + Y01",
    ],
)
def test_what_has_no_finite_value_is_said_at_once(text):
    with pytest.raises(UsageError, match="has no value at the constants reached"):
        evaluated(text, (2.0, 700.0, -3.0))


TEXTS = st.recursive(
    st.sampled_from([*NAMES, "2", "0.5", "-3", "1.25e-2"]),
    lambda inner: st.one_of(
        st.tuples(inner, st.sampled_from(["+", "-", "*", "/", "**"]), inner).map(lambda t: f"({t[0]}){t[1]}({t[2]})"),
        st.tuples(st.sampled_from(["-", "+", "sqrt", "exp", "log", "abs"]), inner).map(lambda t: f"{t[0]}({t[1]})"),
    ),
    max_leaves=6,
)
VALUES = st.tuples(*[st.floats(0.3, 3.0)] * 3)


@given(text=TEXTS, values=VALUES)
def test_values_and_slopes_are_those_of_a_general_program(text, values):
    """Against mpmath at 60 digits: value, and central differences whose error is (step)^2 = 1e-30."""
    try:
        found = evaluated(text, values)
    except UsageError as error:
        assert "has no value" in str(error) or "expression" in str(error)
        return
    with mpmath.workdps(60):
        step = mpmath.mpf(10) ** -15

        def exact(shift: int | None = None, sign: int = 0):
            known = {n: mpmath.mpf(v) for n, v in zip(NAMES, values, strict=True)}
            if shift is not None:
                known[NAMES[shift]] += sign * step
            # The text is of this test's own making.
            return mpmath.mpmathify(eval(text, {"__builtins__": {}}, {**known, **FUNCTIONS}))

        try:
            value = exact()
            slopes = [(exact(i, 1) - exact(i, -1)) / (2 * step) for i in range(3)]
        except (ZeroDivisionError, ValueError, OverflowError):
            return
        rounding = _amplified(text, values)
        if not all(isinstance(item, mpmath.mpf) for item in [value, *slopes]) or rounding > 1e-6:
            return
    for mine, other in zip([found.value, *found.gradient], [value, *slopes], strict=True):
        size = max(abs(float(other)), max(abs(float(s)) for s in slopes), abs(float(value)))
        # Constants such as 2**0.5 are plain floats in the text evaluated here too: a difference of two of them that
        # should vanish is left with their rounding.
        assert abs(mine - float(other)) <= 1e-7 * size + 1e-12


def _amplified(text: str, values) -> float:
    """Relative change of the result when its names change by rounding; cancellations are no fault of the program."""
    base = evaluated(text, values)
    worst = 0.0
    for factor in (1 + 1e-15, 1 - 1e-15):
        try:
            other = evaluated(text, [v * factor for v in values])
        except UsageError:
            return math.inf
        for a, b in zip([base.value, *base.gradient], [other.value, *other.gradient], strict=True):
            worst = max(worst, abs(a - b) / max(abs(a), abs(b), 1e-300))
    return worst
