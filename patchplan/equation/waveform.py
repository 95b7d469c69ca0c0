"""Functions of time as numbers: closed formulas and recordings."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.problem import Recording
from patchplan.equation.tree import PIECEWISE, Binary, Call, Minus, Name, Node, Number

Array = NDArray[np.float64]

#: Samples over the run in the search for jumps whose argument is not linear in t.
SAMPLES = 4001


@dataclass(frozen=True, slots=True)
class Waveform:
    """A known function of time, in problem units of signal and time.

    Attributes
    ----------
    tree
        Formula in ``t`` alone (parameters already numbers), or None for a recording.
    recording
        Rows of the recording, or None for a formula.
    """

    tree: Node | None = None
    recording: Recording | None = None

    def values(self, t: Array) -> Array:
        """Values at the times ``t`` [problem time], shape of ``t``; at a jump the value right of it."""
        if self.recording is not None:
            return np.interp(t, self.recording.times, self.recording.values)
        assert self.tree is not None
        return numeric_tree(self.tree, t)

    def before(self, t: Array) -> Array:
        """Limits from the left at the times ``t`` [problem time], shape of ``t``."""
        if self.recording is not None:
            return self.values(t)
        assert self.tree is not None
        return numeric_tree(self.tree, t, left=True)

    def jumps(self, duration: float) -> tuple[float, ...]:
        """Times strictly inside (0, duration) where the value or the slope jumps, rising."""
        if self.recording is not None:
            times = np.asarray(self.recording.times)
            slopes = np.diff(self.recording.values) / np.diff(times)
            found = times[1:-1][~np.isclose(slopes[1:], slopes[:-1], rtol=1e-12, atol=0.0)].tolist()
        else:
            assert self.tree is not None
            found = [x for call in _piecewise_calls(self.tree) for x in _call_jumps(call, duration)]
        inside = sorted(x for x in found if 0.0 < x < duration)
        # Two jumps nearer than rounding are one.
        return tuple(x for i, x in enumerate(inside) if i == 0 or x - inside[i - 1] > 1e-12 * duration)


def numeric_tree(node: Node, t: Array, *, left: bool = False) -> Array:
    """Values of a tree in ``t`` alone.

    Parameters
    ----------
    node
        The tree; its only name is ``t`` (and ``pi``).
    t
        Times [problem time], any shape.
    left
        Give limits from the left at jumps instead of values right of them.

    Returns
    -------
    Array
        Shape of ``t``; nan or inf where the formula has no value.
    """
    with np.errstate(all="ignore"):
        values = np.asarray(_value(node, {"t": t, "pi": np.pi}, -1 if left else 1), dtype=float)
    return values * np.ones(np.shape(t))


def numeric_names(node: Node, values: Mapping[str, Array | float]) -> Array:
    """Values of a tree of which every name has a value; arrays broadcast."""
    with np.errstate(all="ignore"):
        return np.asarray(_value(node, {"pi": np.pi, **values}, 0), dtype=float)


def _value(node: Node, values: Mapping[str, Array | float], side: int) -> Array | float:
    if isinstance(node, Number):
        return float(node.value)
    if isinstance(node, Name):
        return values[node.name]
    if isinstance(node, Minus):
        return -_value(node.operand, values, side)
    if isinstance(node, Binary):
        return _OPERATIONS[node.operator](_value(node.left, values, side), _value(node.right, values, side))
    if side and node.function in _EDGES:
        # Rounding may put the argument on the wrong side of an edge that a time was computed from; a few last places
        # of t decide it.
        t = np.asarray(values["t"], dtype=float)
        values = {**values, "t": t + side * 8.0 * np.spacing(np.abs(t))}
    arguments = [np.asarray(_value(a, values, side), dtype=float) for a in node.arguments]
    return _CALLS[node.function](*arguments)


def _phase(x: Array, period: Array) -> Array:
    return np.asarray(x / period - np.floor(x / period))


def _step(x: Array) -> Array:
    return np.where(x >= 0.0, 1.0, 0.0)


_OPERATIONS: dict[str, Callable[..., Array]] = {
    "+": np.add, "-": np.subtract, "*": np.multiply, "/": np.divide,
    "^": lambda a, b: np.power(np.asarray(a, dtype=float), b),
}  # fmt: skip

# triangle: -1 at 0, +1 at half the period; sawtooth: rises from -1 to 1 over the period.
_CALLS: dict[str, Callable[..., Array]] = {
    "sin": np.sin, "cos": np.cos, "tan": np.tan, "exp": np.exp, "log": np.log, "sqrt": np.sqrt, "abs": np.abs,
    "sign": np.sign, "tanh": np.tanh, "step": _step,
    "ramp": lambda x: np.maximum(x, 0.0),
    "pulse": lambda x, start, width: _step(x - start) - _step(x - (start + width)),
    "square": lambda x, period: np.where(_phase(x, period) < 0.5, 1.0, -1.0),
    "triangle": lambda x, period: 1.0 - 2.0 * np.abs(2.0 * _phase(x, period) - 1.0),
    "sawtooth": lambda x, period: 2.0 * _phase(x, period) - 1.0,
}  # fmt: skip

#: Functions whose value jumps.
_EDGES = frozenset({"step", "pulse", "square", "sawtooth", "sign"})


def _piecewise_calls(node: Node) -> list[Call]:
    found: list[Call] = []
    stack = [node]
    while stack:
        top = stack.pop()
        if isinstance(top, Minus):
            stack.append(top.operand)
        elif isinstance(top, Binary):
            stack += [top.left, top.right]
        elif isinstance(top, Call):
            stack += top.arguments
            if top.function in PIECEWISE:
                found.append(top)
    return found


def _call_jumps(call: Call, duration: float) -> list[float]:
    """Times at which the argument of a piecewise function meets one of its edges."""
    rest = [float(numeric_tree(a, np.zeros(1))[0]) for a in call.arguments[1:]]
    times = np.linspace(0.0, duration, SAMPLES)
    x = numeric_tree(call.arguments[0], times)
    line = line_of(call.arguments[0])
    found: list[float] = []
    for edge in _edges(call.function, rest, float(np.nanmin(x)), float(np.nanmax(x))):
        if line is None:
            found += _crossings(call.arguments[0], times, edge)
        elif line[1]:
            found.append((edge - float(line[0])) / float(line[1]))
    return found


def _edges(function: str, rest: list[float], low: float, high: float) -> list[float]:
    """Values of the argument in [low, high] at which the function or its slope jumps."""
    if function == "pulse":
        return [rest[0], rest[0] + rest[1]]
    if function in ("square", "triangle", "sawtooth"):
        step = rest[0] if function == "sawtooth" else rest[0] / 2.0
        return [float(k) * step for k in range(int(np.floor(low / step)), int(np.ceil(high / step)) + 1)]
    return [0.0]


def line_of(node: Node) -> tuple[Fraction, Fraction] | None:
    """(a, b) where the tree is a + b*t, exactly, else None."""
    if isinstance(node, Number):
        return node.value, Fraction(0)
    if isinstance(node, Name):
        return (Fraction(0), Fraction(1)) if node.name == "t" else None
    if isinstance(node, Minus):
        inner = line_of(node.operand)
        return None if inner is None else (-inner[0], -inner[1])
    if not isinstance(node, Binary):
        return None
    left, right = line_of(node.left), line_of(node.right)
    if left is None or right is None:
        return None
    if node.operator in "+-":
        sign = 1 if node.operator == "+" else -1
        return left[0] + sign * right[0], left[1] + sign * right[1]
    if node.operator == "*" and not (left[1] and right[1]):
        return left[0] * right[0], left[0] * right[1] + left[1] * right[0]
    if node.operator == "/" and not right[1] and right[0]:
        return left[0] / right[0], left[1] / right[0]
    return None


def _crossings(argument: Node, times: Array, edge: float) -> list[float]:
    """Times at which an argument that is not linear in t meets an edge, by bisection of sign changes."""
    above = numeric_tree(argument, times) >= edge
    places = np.flatnonzero(above[1:] != above[:-1])
    low, high, start = times[places], times[places + 1], above[places]
    for _ in range(60):
        middle = 0.5 * (low + high)
        same = (numeric_tree(argument, middle) >= edge) == start
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    return [float(x) for x in high]
