"""LaTeX tables: text from files stays text, printed numbers survive."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.mathtext import MathTextParser

from dunhamfit.show.escape import escape_controls
from dunhamfit.show.latex import latex_number, latex_text, to_latex
from dunhamfit.show.numbers import format_value, parse_value_sigma
from dunhamfit.show.tables import Column, Table

# The ten special characters of LaTeX (L. Lamport, LaTeX: a document preparation system, 2nd ed., section 2.1;
# from memory), and how each is printed as itself.
SPECIAL = {
    r"\#": "#",
    r"\$": "$",
    r"\%": "%",
    r"\&": "&",
    r"\_": "_",
    r"\{": "{",
    r"\}": "}",
    r"\textasciitilde{}": "~",
    r"\textasciicircum{}": "^",
    r"\textbackslash{}": "\\",
    # not special, but other characters in the oldest font encoding
    r"\textless{}": "<",
    r"\textgreater{}": ">",
    r"\textbar{}": "|",
    # not special, but read as arguments where they follow the end of a row
    "{[}": "[",
    "{*}": "*",
}


def read_back(latex: str) -> str:
    """The characters that LaTeX would print, for text without mathematics; fails on a bare special one."""
    token = re.compile(
        "|".join(re.escape(command) for command in sorted(SPECIAL, key=len, reverse=True)) + r"|[^#$%&_{}~^\\]"
    )
    tokens = token.findall(latex)
    assert "".join(tokens) == latex, "a special character stands unescaped"
    return "".join(SPECIAL.get(part, part) for part in tokens)


@given(st.text().map(lambda text: "?" + re.sub(r"\d", "", text)))
def test_text_is_printed_as_it_stands(text):
    assert read_back(latex_text(text)) == escape_controls(text)


@given(st.floats(-1e12, 1e12), st.floats(1e-12, 1e3) | st.just(0.0))
def test_the_numbers_of_a_table_can_be_read_back(value, sigma):
    printed = format_value(value, sigma)
    plain = re.sub(r"\\times 10\^\{(-?\d+)\}", r"e\1", latex_number(printed).strip("$"))
    assert parse_value_sigma(plain) == parse_value_sigma(printed)


@pytest.mark.parametrize(
    ("text", "latex"),
    [
        ("2143.2711(12)", "$2143.2711(12)$"),
        ("-6.1215(3)e-06", r"$-6.1215(3)\times 10^{-6}$"),
        ("1.23(12)e+04", r"$1.23(12)\times 10^{4}$"),
        ("2143.2711(inf)", r"$2143.2711(\infty)$"),
        ("2143.2711(nan)", r"$2143.2711(\mathrm{nan})$"),
        ("fixed", "fixed"),
        ("-", "-"),
        ("", ""),
    ],
)
def test_latex_number(text, latex):
    assert latex_number(text) == latex


@pytest.mark.parametrize(
    ("text", "latex"),
    [
        ("Y10", "$Y_{10}$"),
        ("Y10,0", "$Y_{10,0}$"),
        ("d01_C", r"$d_{01}^{\mathrm{C}}$"),
        ("value (cm-1)", "value (cm$^{-1}$)"),
        ("28Si32S", "$^{28}$Si$^{32}$S"),
        ("12C1H+", "$^{12}$C$^{1}$H$^{+}$"),
        ("Constants of 28Si32S, fitted", "Constants of $^{28}$Si$^{32}$S, fitted"),
        ("furnace_2024", r"furnace\_2024"),
        ("AY10", "AY10"),
        ("2-0", "2-0"),
        ("\x1b[2J", r"\textbackslash{}x1b{[}2J"),
        (r"\input{secret}", r"\textbackslash{}input\{secret\}"),
    ],
)
def test_latex_text(text, latex):
    assert latex_text(text) == latex


@pytest.mark.parametrize(
    "text", ["Y10,0 d01_C d10,2_Si cm-1 28Si32S 12C1H+", "2143.2711(12)", "-6.1215(3)e-06", "1.0(inf)"]
)
def test_the_mathematics_is_well_formed(text):
    # matplotlib's parser of TeX mathematics, a general-purpose library, refuses what is malformed.
    latex = latex_text(text) if " " in text else latex_number(text)
    formulas = re.findall(r"\$[^$]+\$", latex)
    assert formulas
    for formula in formulas:
        MathTextParser("path").parse(formula.replace("$^", "${}^"))


def test_a_whole_table():
    table = Table(
        "Constants of 28Si32S",
        (Column("term"), Column("value", "decimal", "cm-1"), Column("lines", "right"), Column("source")),
        (("Y10", "749.64581(12)", "12", "a&b"), ("[Y02]", "-2.01032(12)e-07", "-", "50 %")),
        ("One standard uncertainty.",),
    )
    # Written by hand; the rules are those of the booktabs package (its manual, from memory).
    assert to_latex(table).splitlines() == [
        r"\begin{table}",
        r"\caption{Constants of $^{28}$Si$^{32}$S}",
        r"\begin{tabular}{lrrl}",
        r"\toprule",
        r"term & value (cm$^{-1}$) & lines & source \\",
        r"\midrule",
        r"$Y_{10}$ & $749.64581(12)$ & $12$ & a\&b \\",
        r"{[}$Y_{02}$] & $-2.01032(12)\times 10^{-7}$ & - & 50 \% \\",
        r"\bottomrule",
        r"\end{tabular}",
        r"\par\footnotesize One standard uncertainty.",
        r"\end{table}",
    ]
