"""Formulas in t as plain functions of one float, for the inner loop of a solver."""

from __future__ import annotations

import math
import operator
from collections.abc import Callable

from patchplan.equation.tree import Call, Minus, Name, Node, Number

Scalar = Callable[[float], float]

_OPERATIONS: dict[str, Callable[[float, float], float]] = {
    "+": operator.add, "-": operator.sub, "*": operator.mul, "/": operator.truediv, "^": math.pow,
}  # fmt: skip
_FUNCTIONS: dict[str, Callable[[float], float]] = {
    "sin": math.sin, "cos": math.cos, "tan": math.tan, "exp": math.exp, "log": math.log, "sqrt": math.sqrt,
    "abs": abs, "tanh": math.tanh,
}  # fmt: skip


def scalar_function(tree: Node) -> Scalar | None:
    """The formula as a function of t, or None where it holds a function that jumps.

    A solver's call costs about a tenth of one with arrays of length 1. Outside a function's domain it raises
    ``ValueError``, ``ZeroDivisionError`` or ``OverflowError``.
    """
    if isinstance(tree, Number):
        value = float(tree.value)
        return lambda t: value
    if isinstance(tree, Name):
        return (lambda t: math.pi) if tree.name == "pi" else (lambda t: t)
    if isinstance(tree, Minus):
        return _joined(operator.neg, scalar_function(tree.operand))
    if isinstance(tree, Call):
        known = _FUNCTIONS.get(tree.function)
        return None if known is None else _joined(known, scalar_function(tree.arguments[0]))
    left, right = scalar_function(tree.left), scalar_function(tree.right)
    if left is None or right is None:
        return None
    return _combined(_OPERATIONS[tree.operator], left, right)


def _joined(outer: Callable[[float], float], inner: Scalar | None) -> Scalar | None:
    return None if inner is None else (lambda t: outer(inner(t)))


def _combined(outer: Callable[[float, float], float], left: Scalar, right: Scalar) -> Scalar:
    return lambda t: outer(left(t), right(t))
