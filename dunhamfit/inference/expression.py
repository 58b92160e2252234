"""Expressions that a job file may give: numbers, names, + - * / **, sqrt, exp, log and abs, and nothing else.

An expression is parsed once and walked node by node; no text of a file is ever evaluated.
Values carry their gradient along (forward differentiation), so that derivatives are exact.
"""

from __future__ import annotations

import ast
import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError

_ALLOWED = "numbers, terms such as Y01, + - * / **, parentheses, sqrt, exp, log and abs"
# Value and slope of each function.
_FUNCTIONS = {
    "sqrt": (math.sqrt, lambda x: 0.5 / math.sqrt(x)),
    "exp": (math.exp, math.exp),
    "log": (math.log, lambda x: 1.0 / x),
    "abs": (abs, lambda x: math.copysign(1.0, x)),
}
_LONGEST = 500
# Levels of nesting, which a sum of as many terms has too; far below what Python can walk.
_DEEPEST = 60


@dataclass(frozen=True)
class Dual:
    """A value and its gradient, shape (n,)."""

    value: float
    gradient: np.ndarray


@dataclass(frozen=True, eq=False)
class Expression:
    """A checked expression.

    Attributes
    ----------
    text : str
    names : frozenset of str
        Names that it uses.
    tree : ast.expr
    """

    text: str
    names: frozenset[str]
    tree: ast.expr

    def evaluate(self, known: Mapping[str, Dual]) -> Dual:
        """Value and gradient for values and gradients of its names.

        Raises
        ------
        UsageError
            Where a value has no result, such as a division by zero.
        """
        try:
            with np.errstate(all="ignore"):
                result = _walk(self.tree, known)
            if not (math.isfinite(result.value) and np.all(np.isfinite(result.gradient))):
                raise OverflowError("it or its slope is not finite")
            return result
        except (ZeroDivisionError, ValueError, OverflowError) as error:
            raise UsageError(f"relation '{self.text}' has no value at the constants reached: {error}") from None


def parse_expression(text: object, *, names) -> Expression:
    """Check an expression.

    Parameters
    ----------
    text : str
    names : collection of str
        Names that may stand in it.

    Raises
    ------
    UsageError
        Saying what is allowed.
    """
    if not isinstance(text, str) or len(text) > _LONGEST:
        raise UsageError(f"a relation must be text of at most {_LONGEST} characters (got {text!r:.60})")
    try:
        tree = ast.parse(text, mode="eval").body
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        raise UsageError(f"relation '{text}' is not an expression; allowed are {_ALLOWED}") from None
    used = _check(tree, text, _DEEPEST)
    unknown = sorted(used - set(names))
    if unknown:
        raise UsageError(
            f"relation '{text}': {', '.join(unknown)} is not in the model; it has {', '.join(sorted(names))}"
        )
    return Expression(text, frozenset(used), tree)


def _check(node: ast.expr, text: str, depth: int) -> set[str]:
    """Names below a node; raise UsageError for a kind of node that is not allowed or more than `depth` levels."""
    if not depth:
        raise UsageError(f"relation '{text}' is nested more than {_DEEPEST} levels deep; write it shorter")
    match node:
        case ast.Constant(value=int() | float() as value) if not isinstance(value, bool):
            return set()
        case ast.Name(id=name):
            return {name}
        case ast.UnaryOp(op=ast.UAdd() | ast.USub(), operand=inner):
            return _check(inner, text, depth - 1)
        case ast.BinOp(left=left, op=ast.Add() | ast.Sub() | ast.Mult() | ast.Div() | ast.Pow(), right=right):
            return _check(left, text, depth - 1) | _check(right, text, depth - 1)
        case ast.Call(func=ast.Name(id=name), args=[inner], keywords=[]) if name in _FUNCTIONS:
            return _check(inner, text, depth - 1)
    raise UsageError(f"relation '{text}': {ast.unparse(node)!r} is not allowed; allowed are {_ALLOWED}")


def _walk(node: ast.expr, known: Mapping[str, Dual]) -> Dual:
    match node:
        case ast.Constant(value=value):
            return Dual(float(value), np.zeros_like(next(iter(known.values())).gradient))
        case ast.Name(id=name):
            return known[name]
        case ast.UnaryOp(op=ast.USub(), operand=inner):
            item = _walk(inner, known)
            return Dual(-item.value, -item.gradient)
        case ast.UnaryOp(operand=inner):
            return _walk(inner, known)
        case ast.Call(func=ast.Name(id=name), args=[inner]):
            item = _walk(inner, known)
            function, slope = _FUNCTIONS[name]
            return Dual(function(item.value), slope(item.value) * item.gradient)
        case ast.BinOp(left=left, op=operation, right=right):
            return _combine(operation, _walk(left, known), _walk(right, known))


def _combine(operation: ast.operator, a: Dual, b: Dual) -> Dual:
    match operation:
        case ast.Add():
            return Dual(a.value + b.value, a.gradient + b.gradient)
        case ast.Sub():
            return Dual(a.value - b.value, a.gradient - b.gradient)
        case ast.Mult():
            return Dual(a.value * b.value, b.value * a.gradient + a.value * b.gradient)
        case ast.Div():
            ratio = a.value / b.value
            return Dual(ratio, (a.gradient - ratio * b.gradient) / b.value)
    power = a.value**b.value
    if isinstance(power, complex):
        raise ValueError("a broken power of a negative number")
    gradient = b.value * a.value ** (b.value - 1) * a.gradient if b.value else 0.0 * a.gradient
    if np.any(b.gradient):
        gradient = gradient + power * math.log(a.value) * b.gradient
    return Dual(float(power), gradient)
