"""Waveforms of the sources as SPICE elements."""

from __future__ import annotations

import math
from collections.abc import Sequence
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from patchplan.circuit.records import GROUND, Circuit, Part
from patchplan.circuit.spice_models import LEAST_OHM, num
from patchplan.equation.problem import Recording
from patchplan.equation.system import level_of
from patchplan.equation.tree import PIECEWISE, Binary, Call, Minus, Name, Node, Number
from patchplan.equation.waveform import Waveform

Array = NDArray[np.float64]

#: A jump takes this part of the run.
RISE = 1e-6
#: Straight pieces that stand for one smooth stretch of a piecewise function of a curved argument.
_CURVED_PIECES = 400
#: Functions of the tree that SPICE knows under another name.
_NAMES = {"log": "ln", "sign": "sgn"}
_PER_LINE = 8


class SourceText:
    """Writes the source parts of one circuit; piecewise functions of time become voltage sources of their own."""

    def __init__(self, circuit: Circuit) -> None:
        self.circuit = circuit
        self.lines: list[str] = []
        self._helpers: dict[Node, str] = {}

    def add(self, part: Part) -> None:
        """Append the lines of one source part."""
        source = self.circuit.sources.get(part.model)
        node = self.circuit.nodes.get(part.nets[0])
        offset = node.offset_volts if node else 0.0
        self.lines.append(f"* {part.ref}: {part.model}, {num(part.value)} V per unit")
        if source is None or source.waveform is None:
            low, high = (float(b) for b in (source.within if source and source.within else (0, 0)))
            middle = part.value * (low + high) / 2 + offset
            self.lines.append(f"* known only by its bounds {num(low)} to {num(high)}: the middle stands in")
            self.lines.append(f"V{part.ref} {part.nets[0]} 0 DC {num(middle)}")
        elif source.waveform.recording is not None:
            times, values = self._within_run(source.waveform.recording)
            self._piecewise_linear(f"V{part.ref} {part.nets[0]}", times, part.value * values + offset)
        elif source.waveform.tree is not None:
            text = self.expression(source.waveform.tree)
            level = f"+({num(offset)})" if offset else ""
            self.lines.append(f"B{part.ref} {part.nets[0]} 0 V={num(part.value)}*({text}){level}")

    def add_switch(self, part: Part) -> None:
        """Append a switch whose control line follows a step: its conductance goes with the line, 0 to 1."""
        source = self.circuit.sources[part.control]
        level = level_of(source, self.circuit.duration / self.circuit.time_scale)
        assert source.waveform is not None
        assert source.waveform.tree is not None
        line = f"({num(1 / level)}*{self.expression(source.waveform.tree)})"
        closed = line if part.closed == "high" else f"(1-{line})"
        a, b = part.nets
        across = f"v({a})-v({b})" if b != GROUND else f"v({a})"
        self.lines.append(f"* {part.ref}: {num(part.value)} ohm, closed while {part.control} is {part.closed}")
        self.lines.append(f"B{part.ref} {a} {b} I=({across})*{closed}*{num(1 / max(part.value, LEAST_OHM))}")

    def expression(self, tree: Node) -> str:
        """A function of time in SPICE's words."""
        if isinstance(tree, Number):
            return f"({num(float(tree.value))})"
        if isinstance(tree, Name):
            return num(math.pi) if tree.name == "pi" else f"(time*{num(1 / self.circuit.time_scale)})"
        if isinstance(tree, Minus):
            return f"(-{self.expression(tree.operand)})"
        if isinstance(tree, Binary):
            return self._binary(tree)
        if tree.function in PIECEWISE - {"abs", "sign"}:
            return f"v({self._helper(tree)})"
        inner = self.expression(tree.arguments[0])
        return f"{_NAMES.get(tree.function, tree.function)}({inner})"

    def _binary(self, tree: Binary) -> str:
        left = self.expression(tree.left)
        if tree.operator != "^":
            return f"({left}{tree.operator}{self.expression(tree.right)})"
        power = _constant(tree.right)
        if power is None:
            return f"exp({self.expression(tree.right)}*ln({left}))"
        if power.denominator != 1:
            return f"pow({left},{num(float(power))})"
        # SPICE dialects differ on powers of negative numbers; a magnitude has one meaning in all of them.
        magnitude = abs(power.numerator) - power.numerator % 2
        text = f"pow(abs({left}),{magnitude})" if magnitude else "1"
        text = f"({left}*{text})" if power.numerator % 2 else text
        return f"(1/{text})" if power < 0 else text

    def _helper(self, call: Call) -> str:
        """Node that carries a piecewise function of time."""
        if call not in self._helpers:
            # No net of a board ends in an underscore.
            name = f"wave_{len(self._helpers) + 1}_"
            self._helpers[call] = name
            times, values = self._pieces(call)
            self._piecewise_linear(f"V{name} {name}", times, values)
        return self._helpers[call]

    def _pieces(self, call: Call) -> tuple[Array, Array]:
        """Corners (times, values) of a function of time, two at a jump."""
        duration = self.circuit.duration / self.circuit.time_scale
        wave = Waveform(call)
        edges = np.array([0.0, *(t for t in wave.jumps(duration) if t < duration * (1 - RISE)), duration])
        times = edges[:-1, None] + np.diff(edges)[:, None] * np.linspace(0.0, 1.0, _CURVED_PIECES + 1)
        values = wave.values(times)
        values[:, -1] = wave.before(edges[1:])
        chords = np.linspace(values[:, 0], values[:, -1], _CURVED_PIECES + 1, axis=1)
        if np.allclose(values, chords, rtol=0.0, atol=1e-9 * float(np.abs(values).max())):
            times, values = times[:, [0, -1]], values[:, [0, -1]]
        return times.ravel(), values.ravel()

    def _within_run(self, recording: Recording) -> tuple[Array, Array]:
        """Rows of a recording, cut to the run."""
        duration = self.circuit.duration / self.circuit.time_scale
        times, values = np.array(recording.times), np.array(recording.values)
        inner = (times > 0) & (times < duration)
        ends = np.interp([0.0, duration], times, values)
        return np.array([0.0, *times[inner], duration]), np.array([ends[0], *values[inner], ends[1]])

    def _piecewise_linear(self, head: str, times: Array, values: Array) -> None:
        """A PWL element; of two equal times the second comes one rise later."""
        circuit = self.circuit
        seconds = times * circuit.time_scale
        seconds = seconds + np.append(0.0, np.diff(times) <= 0) * RISE * circuit.duration
        self.lines.append(f"{head} 0 PWL(")
        points = [f"{time:.12g} {num(value)}" for time, value in zip(seconds, values, strict=True)]
        self.lines += [f"+ {line}" for line in _wrapped(points)]
        self.lines.append("+ )")


def _wrapped(points: Sequence[str]) -> list[str]:
    return [" ".join(points[i : i + _PER_LINE]) for i in range(0, len(points), _PER_LINE)]


def _constant(tree: Node) -> Fraction | None:
    if isinstance(tree, Number):
        return tree.value
    if isinstance(tree, Minus):
        inner = _constant(tree.operand)
        return None if inner is None else -inner
    if isinstance(tree, Binary) and tree.operator == "/":
        top, bottom = _constant(tree.left), _constant(tree.right)
        return None if top is None or not bottom else top / bottom
    return None
