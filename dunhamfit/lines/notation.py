"""How numbers and line labels are printed, and how they are read: text in, numbers out, no files.

Understood in a number: U+2212 as minus, digits in groups of three set off by a blank,
thin or no-break space (SI brochure, 9th edition, section 5.4.4), the standard
uncertainty in parentheses in units of the last digit (the same brochure, section 5.4.5),
exponents written with e or d, a declared decimal comma, and a footnote mark at the end.
A footnote mark is reported, never just dropped.
"""

from __future__ import annotations

import math
import re
from typing import NamedTuple

import numpy as np

_USUAL = str.maketrans({"−": "-"} | dict.fromkeys("\u00a0\u2007\u2008\u2009\u200a\u202f", " "))
_MISSING = {"-", "--", "---", "–", "—", "...", "…", "n/a", "na", "none"}
_NOT_FINITE = re.compile(r"[+-]?(nan|inf|infinity)", re.IGNORECASE)
_FOOTNOTE = r"(?:\s*(?P<mark>[*†‡§¶#]+|\^?[a-z]|\([a-z]\)|\[[a-z0-9]\]|[⁰¹²³⁴⁵⁶⁷⁸⁹ᵃᵇᶜᵈᵉ]+))?"
_NUMBER = re.compile(
    r"""(?P<sign>[+-]?)\ *
    (?P<whole>[0-9]{1,3}(?:\ [0-9]{3})+|[0-9]*)
    (?:\.(?P<fraction>(?:[0-9]{3}\ )+[0-9]{1,3}|[0-9]*))?
    (?:\ *\((?P<error>[0-9]+(?:\.[0-9]+)?)\))?
    (?:[eEdD](?P<exponent>[+-]?[0-9]{1,4}))?"""
    + _FOOTNOTE,
    re.VERBOSE,
)
_LABEL = re.compile(
    r"(?P<branch>[A-Za-z])\s*(?P<open>\(?)\s*(?P<j>[+-]?[0-9]+(?:\.[0-9]+)?)\s*(?P<close>\)?)" + _FOOTNOTE
)
_STEPS = {"P": -1, "R": 1, "Q": 0, "S": 2, "O": -2}

# Each problem with a number: why the cell cannot be used, and what to do.
PROBLEMS = {
    "blank": ("every line needs this value", "give the value or remove the row"),
    "missing": ("it stands for a missing value", "give the value or remove the row"),
    "not finite": ("a finite number was expected", "give the value or remove the row"),
    "comma": ('the decimal sign of the source is "."', 'set decimal = "," if this is a decimal comma'),
    "full stop": ('the decimal sign of the source is ","', 'set decimal = "." or correct the number'),
    "not a number": ("a number such as 2143.2711 was expected", "correct the text or the column map"),
}


class Number(NamedTuple):
    """One number: value, uncertainty in parentheses (NaN if none), footnote mark, and a key of `PROBLEMS`."""

    value: float
    error: float = math.nan
    mark: str = ""
    problem: str = ""


class Label(NamedTuple):
    """One line label read: J' - J'', J'' (both NaN if not understood), and the footnote mark."""

    step: float
    j_lower: float
    mark: str = ""


class NumberColumn(NamedTuple):
    """A column of numbers.

    Attributes
    ----------
    values, errors : ndarray of float, shape (n,)
        NaN where the text has a problem, or states no uncertainty in parentheses.
    problems : dict of int to str
        Index to a key of `PROBLEMS`.
    marks : dict of str to int
        How often each footnote mark was found.
    """

    values: np.ndarray
    errors: np.ndarray
    problems: dict[int, str]
    marks: dict[str, int]


def parse_number(text: str, *, decimal: str = ".") -> Number:
    """Read one number; never raises, `problem` says what is wrong."""
    usual = text.translate(_USUAL).strip()
    if not usual:
        return Number(math.nan, problem="blank")
    if usual.lower() in _MISSING:
        return Number(math.nan, problem="missing")
    if _NOT_FINITE.fullmatch(usual):
        return Number(math.nan, problem="not finite")
    if decimal == ",":
        number = _parse_usual(usual.translate(str.maketrans(",.", ".,")))
        if number.problem and "." in usual and not _parse_usual(usual.replace(",", "")).problem:
            return number._replace(problem="full stop")
        return number
    number = _parse_usual(usual)
    if number.problem and "," in usual and not _parse_usual(usual.replace(",", ".")).problem:
        return number._replace(problem="comma")
    return number


def _parse_usual(text: str) -> Number:
    match = _NUMBER.fullmatch(text)
    if not match or not (match["whole"] or match["fraction"]):
        return Number(math.nan, problem="not a number")
    whole = match["whole"].replace(" ", "")
    fraction = (match["fraction"] or "").replace(" ", "")
    power = int(match["exponent"] or 0)
    value = float(f"{match['sign']}{whole or '0'}.{fraction or '0'}e{power}")
    if not math.isfinite(value):
        return Number(math.nan, problem="not finite")
    error = math.nan
    if match["error"]:
        digits, _, decimals = match["error"].partition(".")
        # 12.3(1.2) has the decimals of its value and can only mean 1.2; 12.34(1.2) could mean two things.
        if decimals and len(decimals) != len(fraction):
            return Number(math.nan, problem="not a number")
        error = float(f"{digits}{decimals}e{power - len(fraction)}")
    return Number(value, error, match["mark"] or "")


def parse_numbers(texts: list[str], *, decimal: str = ".") -> NumberColumn:
    """Read a column: all at once where the texts are plain, one by one where they are not.

    Parameters
    ----------
    texts : list of str, length n
    decimal : "." or ","
    """
    values = _parse_plain(texts, decimal)
    if values is not None:
        return NumberColumn(values, np.full(len(texts), np.nan), {}, {})
    known = {text: parse_number(text, decimal=decimal) for text in set(texts)}
    numbers = [known[text] for text in texts]
    marks: dict[str, int] = {}
    for number in numbers:
        if number.mark:
            marks[number.mark] = marks.get(number.mark, 0) + 1
    return NumberColumn(
        np.array([math.nan if number.problem else number.value for number in numbers], dtype=float),
        np.array([math.nan if number.problem else number.error for number in numbers], dtype=float),
        {index: number.problem for index, number in enumerate(numbers) if number.problem},
        marks,
    )


def _parse_plain(texts: list[str], decimal: str) -> np.ndarray | None:
    """The column if Python reads every text as a finite number of plain ASCII digits, else None."""
    joined = "".join(texts)
    if not joined.isascii() or "_" in joined:
        return None
    if decimal == ",":
        if "." in joined:
            return None
        texts = [text.replace(",", ".") for text in texts]
    try:
        values = np.array(list(map(float, texts)), dtype=float)
    except ValueError:
        return None
    return values if np.isfinite(values).all() else None


def parse_label(text: str) -> Label:
    """Read `R(12)`, `P 3` or `p(3)a`: the branch letter of J' - J'' and J''; never raises."""
    match = _LABEL.fullmatch(text.translate(_USUAL).strip())
    if not match or bool(match["open"]) != bool(match["close"]):
        return Label(math.nan, math.nan)
    step = branch_step(match["branch"])
    j_lower = float(match["j"])
    if not (math.isfinite(step) and math.isfinite(j_lower)):
        return Label(math.nan, math.nan)
    return Label(step, j_lower, match["mark"] or "")


def branch_step(text: str) -> float:
    """J' - J'' of a branch letter; NaN if it is none."""
    return float(_STEPS.get(text.strip().upper(), math.nan))
