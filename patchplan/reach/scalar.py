"""Formulas in t as plain functions of one float, for the inner loop of a solver."""

from __future__ import annotations

import math
import operator
from collections.abc import Callable

from patchplan.equation.tree import Binary, Call, Minus, Name, Node, Number

Scalar = Callable[[float], float]

_OPERATIONS: dict[str, Callable[[float, float], float]] = {
    "+": operator.add, "-": operator.sub, "*": operator.mul, "/": operator.truediv, "^": math.pow,
}  # fmt: skip


def _step(x: float) -> float:
    return 1.0 if x >= 0 else 0.0


def _phase(x: float, period: float) -> float:
    return x / period - math.floor(x / period)


#: As `Waveform.values` has them; a solver never asks at a jump itself.
_FUNCTIONS: dict[str, Callable[..., float]] = {
    "sin": math.sin, "cos": math.cos, "tan": math.tan, "exp": math.exp, "log": math.log, "sqrt": math.sqrt,
    "abs": abs, "sign": lambda x: float((x > 0) - (x < 0)), "tanh": math.tanh,
    "step": _step,
    "ramp": lambda x: max(x, 0.0),
    "pulse": lambda x, start, width: _step(x - start) - _step(x - (start + width)),
    "square": lambda x, period: 1.0 if _phase(x, period) < 0.5 else -1.0,
    "triangle": lambda x, period: 1.0 - 2.0 * abs(2.0 * _phase(x, period) - 1.0),
    "sawtooth": lambda x, period: 2.0 * _phase(x, period) - 1.0,
}  # fmt: skip


def scalar_function(tree: Node) -> Scalar:
    """The formula as a function of t.

    A solver's call costs about a tenth of one with arrays of length 1. Outside a function's domain it raises
    ``ValueError`` or an ``ArithmeticError``.
    """
    if isinstance(tree, Number):
        value = float(tree.value)
        return lambda t: value
    if isinstance(tree, Name):
        return (lambda t: math.pi) if tree.name == "pi" else (lambda t: t)
    if isinstance(tree, Minus):
        inner = scalar_function(tree.operand)
        return lambda t: -inner(t)
    if isinstance(tree, Binary):
        return _joined(_OPERATIONS[tree.operator], scalar_function(tree.left), scalar_function(tree.right))
    return _called(tree)


def _called(tree: Call) -> Scalar:
    outer, arguments = _FUNCTIONS[tree.function], [scalar_function(a) for a in tree.arguments]
    if len(arguments) == 2:
        return _joined(outer, *arguments)
    if len(arguments) == 1:
        only = arguments[0]
        return lambda t: outer(only(t))
    return lambda t: outer(*(a(t) for a in arguments))


def _joined(outer: Callable[[float, float], float], left: Scalar, right: Scalar) -> Scalar:
    return lambda t: outer(left(t), right(t))
