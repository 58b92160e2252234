"""Tables for a paper: LaTeX with the rules of the booktabs package and no other package."""

from __future__ import annotations

import re

from dunhamfit.show.escape import escape_controls
from dunhamfit.show.tables import Column, Table

_SPECIAL = {
    "\\": r"\textbackslash{}",
    "{": r"\{",
    "}": r"\}",
    "$": r"\$",
    "&": r"\&",
    "#": r"\#",
    "%": r"\%",
    "_": r"\_",
    "~": r"\textasciitilde{}",
    "^": r"\textasciicircum{}",
    "<": r"\textless{}",
    ">": r"\textgreater{}",
    "|": r"\textbar{}",
    # As the first character of a row these would be read as arguments of the \\ before it.
    "[": "{[}",
    "*": "{*}",
}

_NUMBER = re.compile(
    r"(?P<number>[-+]?[\d.]+)(?P<sigma>\((?:[\d.]+|inf|nan)\))?(?:e(?P<power>[-+]?\d+))?", re.ASCII
)

# Words of the trade that a paper writes with indices: units, terms, breakdown terms, isotopologues.
_WORD = re.compile(
    r"(?<!\w)(?:"
    r"(?P<unit>cm-1)"
    r"|Y(?P<term>\d+,\d+|\d\d)"
    r"|d(?P<breakdown>\d+,\d+|\d\d)_(?P<atom>[A-Z][a-z]?)"
    r"|(?P<mass_1>\d{1,3})(?P<atom_1>[A-Z][a-z]?)(?P<mass_2>\d{1,3})(?P<atom_2>[A-Z][a-z]?)(?P<charge>[+-]\d?)?"
    r")(?!\w)",
    re.ASCII,
)


def to_latex(table: Table) -> str:
    r"""The table as a `table` environment; the document needs ``\usepackage{booktabs}``.

    Numbers of "right" and "decimal" columns become mathematics, with a true minus sign and
    powers of ten; everything else is text, with the characters that LaTeX treats
    specially escaped, so that names from files cannot become commands.
    """
    spec = "".join("l" if column.align == "left" else "r" for column in table.columns)
    lines = [
        r"\begin{table}",
        rf"\caption{{{latex_text(table.title)}}}",
        rf"\begin{{tabular}}{{{spec}}}",
        r"\toprule",
        _row(latex_text(column.heading) for column in table.columns),
        r"\midrule",
        *(_row(map(_cell, table.columns, row)) for row in table.rows),
        r"\bottomrule",
        r"\end{tabular}",
        *(rf"\par\footnotesize {latex_text(note)}" for note in table.notes),
        r"\end{table}",
    ]
    return "\n".join(lines) + "\n"


def latex_text(text: str) -> str:
    """`text` escaped for LaTeX, with terms, units and isotopologues given their indices."""
    text = escape_controls(text)
    parts, done = [], 0
    for match in _WORD.finditer(text):
        parts += [_escaped(text[done : match.start()]), _word(match)]
        done = match.end()
    return "".join([*parts, _escaped(text[done:])])


def latex_number(text: str) -> str:
    """A printed number such as -6.1215(3)e-06 as mathematics; other text as `latex_text` writes it."""
    match = _NUMBER.fullmatch(text)
    if match is None:
        return latex_text(text)
    sigma = (match["sigma"] or "").replace("inf", r"\infty").replace("nan", r"\mathrm{nan}")
    power = rf"\times 10^{{{int(match['power'])}}}" if match["power"] else ""
    return f"${match['number']}{sigma}{power}$"


def _cell(column: Column, text: str) -> str:
    return latex_text(text) if column.align == "left" else latex_number(text)


def _row(cells) -> str:
    return " & ".join(cells) + r" \\"


def _escaped(text: str) -> str:
    return "".join(_SPECIAL.get(character, character) for character in text)


def _word(match: re.Match[str]) -> str:
    if match["unit"]:
        return "cm$^{-1}$"
    if match["term"]:
        return rf"$Y_{{{match['term']}}}$"
    if match["breakdown"]:
        return rf"$d_{{{match['breakdown']}}}^{{\mathrm{{{match['atom']}}}}}$"
    charge = rf"$^{{{match['charge']}}}$" if match["charge"] else ""
    return "$^{{{mass_1}}}${atom_1}$^{{{mass_2}}}${atom_2}".format(**match.groupdict()) + charge
