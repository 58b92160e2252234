"""A choice of lines written as text, such as `v_upper <= 5 and isotopologue == "28Si32S"`.

The text is parsed into a syntax tree of which a few kinds of node are allowed and
walked; nothing of it is ever executed.
"""

from __future__ import annotations

import ast
import operator
import warnings
from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.lines.line_list import LineList

NUMBERS = ("position", "sigma", "v_upper", "v_lower", "j_upper", "j_lower")
WORDS = ("isotopologue", "branch")
LONGEST = 500
LARGEST = 1e300

_ALLOWED = (
    f"a choice of lines compares {', '.join(NUMBERS)} with numbers, or {' and '.join(WORDS)} with "
    "quoted text (== and != only), joined by and, or, not and parentheses; positions and sigma are in cm-1"
)
_COMPARISONS = {
    ast.Lt: operator.lt,
    ast.LtE: operator.le,
    ast.Gt: operator.gt,
    ast.GtE: operator.ge,
    ast.Eq: operator.eq,
    ast.NotEq: operator.ne,
}
_BRANCHES = {-2: "O", -1: "P", 0: "Q", 1: "R", 2: "S"}


@dataclass(frozen=True)
class Choice:
    """A parsed choice; `text` is what the user wrote."""

    text: str
    tree: ast.expr

    def mask(self, lines: LineList) -> np.ndarray:
        """Which lines are chosen, shape (n_lines,)."""
        return np.broadcast_to(_truth(self.tree, lines), (len(lines),))


def parse_choice(text: str) -> Choice:
    """Parse a choice of lines.

    Raises
    ------
    UsageError
        If the text is no such choice; the message says what is allowed.
    """
    if not isinstance(text, str) or len(text) > LONGEST:
        raise UsageError(f"'use' must be text of at most {LONGEST} characters; {_ALLOWED}")
    try:
        with warnings.catch_warnings():
            # The parser warns of spellings such as `5and`; they are refused or understood like any other.
            warnings.simplefilter("ignore")
            tree = ast.parse(text.strip(), mode="eval").body
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        raise _refusal(text, "it cannot be parsed") from None
    _check(tree, text)
    return Choice(text, tree)


def _refusal(text: str, reason: str) -> UsageError:
    return UsageError(f"'use' = {text!r}: {reason}; {_ALLOWED}")


def _check(node: ast.expr, text: str) -> None:
    """Refuse every node but comparisons joined by and, or, not."""
    if isinstance(node, ast.BoolOp):
        for part in node.values:
            _check(part, text)
    elif isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.Not):
        _check(node.operand, text)
    elif isinstance(node, ast.Compare):
        kinds = [_kind(side, text) for side in (node.left, *node.comparators)]
        unknown = [type(step) for step in node.ops if type(step) not in _COMPARISONS]
        if unknown:
            raise _refusal(text, "this comparison is not known")
        if len(set(kinds)) > 1:
            raise _refusal(text, "numbers are compared with numbers and text with text")
        if kinds[0] == "text" and any(type(step) not in (ast.Eq, ast.NotEq) for step in node.ops):
            raise _refusal(text, "text is compared by == and != only")
    else:
        raise _refusal(text, f"{ast.unparse(node)!r} is not a comparison")


def _kind(node: ast.expr, text: str) -> str:
    """Whether one side of a comparison is a "number" or a "text"."""
    if isinstance(node, ast.Name):
        if node.id not in NUMBERS + WORDS:
            raise _refusal(text, f"{node.id!r} is not known")
        return "number" if node.id in NUMBERS else "text"
    if isinstance(node, ast.Constant) and isinstance(node.value, str):
        return "text"
    number = node.operand if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub) else node
    if isinstance(number, ast.Constant) and type(number.value) in (int, float):
        if number.value > LARGEST:
            raise _refusal(text, f"numbers above {LARGEST:g} are not compared")
        return "number"
    raise _refusal(text, f"{ast.unparse(node)!r} is neither a name, a number nor a text")


def _truth(node: ast.expr, lines: LineList) -> np.ndarray:
    if isinstance(node, ast.BoolOp):
        join = np.logical_and if isinstance(node.op, ast.And) else np.logical_or
        return join.reduce([np.broadcast_to(_truth(part, lines), (len(lines),)) for part in node.values])
    if isinstance(node, ast.UnaryOp):
        return ~_truth(node.operand, lines)
    sides = [_value(side, lines) for side in (node.left, *node.comparators)]
    held = np.ones(len(lines), dtype=bool)
    for step, left, right in zip(node.ops, sides[:-1], sides[1:], strict=True):
        held &= _COMPARISONS[type(step)](left, right)
    return held


def _value(node: ast.expr, lines: LineList):
    """A column of the lines, or a constant as an array without dimensions."""
    if isinstance(node, ast.UnaryOp):
        return -_value(node.operand, lines)
    if isinstance(node, ast.Constant):
        return np.array(node.value if isinstance(node.value, str) else float(node.value))
    if node.id == "isotopologue":
        return np.array(lines.isotopologues or ("",))[lines.isotopologue]
    if node.id == "branch":
        steps = (lines.j_upper - lines.j_lower).tolist()
        return np.array([_BRANCHES.get(step, "") for step in steps], dtype="U1")
    return getattr(lines, node.id)
