"""Gains as a linear system in logarithms: r = b + A theta, one row for each resistor ratio that has to come out right.

With S the volts per unit of a node and T the circuit seconds per unit of problem time, an integrator wants
R*C = T*S_source / (|a|*S), a summer R/Rf = S_source / (|a|*S), a start value R2/R1 = S*|x0| / reference. In logarithms
all are linear in theta = (log S of the free nodes, log T where the speed is free).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage
from patchplan.ranges import Ranges
from patchplan.sizing.records import Target

Array = NDArray[np.float64]
#: Share of a node's limit that its largest swing may use.
LEAST_USE, MOST_USE = 0.5, 0.95


@dataclass(frozen=True, slots=True)
class Affine:
    """constant + sum of coefficients * theta."""

    constant: float
    slope: Mapping[int, float] = field(default_factory=dict)

    def plus(self, other: Affine, sign: float = 1.0) -> Affine:
        """Sum with another, times ``sign``."""
        slope = dict(self.slope)
        for column, value in other.slope.items():
            slope[column] = slope.get(column, 0.0) + sign * value
        return Affine(self.constant + sign * other.constant, {c: v for c, v in slope.items() if v})


@dataclass(frozen=True, slots=True)
class Ratio:
    """One row: ``kind`` is integrator, summer or start; ``wire`` the wire's index (-1 for a start value).

    ``switched`` names the source where the board switches it from its reference, through an on-resistance.
    """

    stage: str
    wire: int
    kind: str
    want: Affine
    weight: float = 1.0
    switched: str = ""


@dataclass(frozen=True)
class Model:
    """Rows, unknowns and their bounds.

    Attributes
    ----------
    ratios
        Rows of the system.
    scale
        Node -> log of its volts per unit.
    low, high
        Bounds of theta, shape ``(n_theta,)``.
    speed
        log of the time scale.
    feedback
        Stage -> column of the log of its feedback resistance, where a knob makes that continuous.
    limit
        Node -> volts it may reach.
    """

    ratios: tuple[Ratio, ...]
    scale: Mapping[str, Affine]
    low: Array
    high: Array
    speed: Affine
    feedback: Mapping[str, int]
    limit: Mapping[str, float]

    @property
    def centre(self) -> Array:
        """Middle of the bounds, shape ``(n_theta,)``."""
        return (self.low + self.high) / 2

    def at(self, affine: Affine, theta: Array) -> float:
        """Value of an affine expression."""
        return affine.constant + sum(v * float(theta[c]) for c, v in affine.slope.items())


def matrix_of(model: Model) -> tuple[Array, Array]:
    """A of shape ``(n_rows, n_theta)`` and b of shape ``(n_rows,)``."""
    matrix = np.zeros((len(model.ratios), len(model.low)))
    for row, ratio in enumerate(model.ratios):
        for column, value in ratio.want.slope.items():
            matrix[row, column] += value
    return matrix, np.array([r.want.constant for r in model.ratios])


def node_limits(patch: Patch, target: Target) -> dict[str, float]:
    """Volts that each node may reach: the op amp's swing into its load, less where a multiplier takes or makes it."""
    swing = min(-target.op_amp.low, target.op_amp.high)
    limit = {s.node: swing for s in patch.stages}
    for stage in patch.stages:
        if stage.kind == "multiplier":
            for node in (stage.node, *(w.source for w in stage.wires)):
                limit[node] = min(limit[node], target.multiplier.limit)
        elif stage.kind == "source":
            limit[stage.node] = min(limit[stage.node], max(target.reference, target.multiplier.limit))
    return limit


def build_model(
    form: Form,
    patch: Patch,
    ranges: Ranges,
    target: Target,
    speed: tuple[float, float],
    weights: Mapping[tuple[str, int], float] | None = None,
) -> Model:
    """Draw up the rows and unknowns.

    Parameters
    ----------
    speed
        Lowest and highest time scale; equal where the speed is given.
    weights
        (stage, wire) -> weight of that row's error; -1 as wire for the start value.
    """
    bounds: list[tuple[float, float]] = []
    limit = node_limits(patch, target)
    scale = _scales(form, patch, ranges, target, limit, bounds)
    clock = Affine(log(speed[0]))
    if speed[1] > speed[0]:
        clock = Affine(0.0, {len(bounds): 1.0})
        bounds.append((log(speed[0]), log(speed[1])))
    # Stages under one knob share the feedback, so that the sections of a ganged potentiometer turn alike.
    feedback: dict[str, int] = {}
    columns: dict[str, int] = {}
    for stage in patch.stages:
        if stage.knob and not stage.bipolar:
            feedback[stage.name] = columns.setdefault(stage.knob, len(bounds))
            if feedback[stage.name] == len(bounds):
                bounds.append((log(max(5e3, target.resistors[0])), log(min(1e5, target.resistors[-1]))))
    ratios = _ratios(form, patch, target, scale, clock, feedback, weights or {})
    low, high = np.array(bounds).reshape(-1, 2).T
    return Model(tuple(ratios), scale, low, high, clock, feedback, limit)


def _scales(
    form: Form,
    patch: Patch,
    ranges: Ranges,
    target: Target,
    limit: Mapping[str, float],
    bounds: list[tuple[float, float]],
) -> dict[str, Affine]:
    """log of the volts per unit of every node; free nodes get an unknown each."""
    scale: dict[str, Affine] = {}
    for stage in patch.stages:
        peak = ranges.nodes[stage.node].peak or 1.0
        if stage.kind == "reference":
            scale[stage.node] = Affine(log(target.reference))
        elif stage.kind == "inverter" and (stage.signal == "1" or target.resistor_piles is None):
            scale[stage.node] = scale[stage.wires[0].source]
        elif stage.kind == "multiplier":
            left, right = (scale[w.source] for w in stage.wires)
            scale[stage.node] = left.plus(right).plus(Affine(-log(target.multiplier.scale)))
        elif stage.signal in form.scales:
            scale[stage.node] = Affine(log(abs(form.scales[stage.signal])))
        elif stage.kind == "source" and not patch.sources[stage.signal].external:
            scale[stage.node] = Affine(log(target.reference / peak))
        else:
            top = limit[stage.node] / peak
            scale[stage.node] = Affine(0.0, {len(bounds): 1.0})
            bounds.append((log(LEAST_USE * top), log(MOST_USE * top)))
    return scale


def _ratios(
    form: Form,
    patch: Patch,
    target: Target,
    scale: Mapping[str, Affine],
    clock: Affine,
    feedback: Mapping[str, int],
    weights: Mapping[tuple[str, int], float],
) -> list[Ratio]:
    ratios = []
    sources = (s for s in patch.stages if s.kind == "source")
    switches = {s.node for s in sources if not patch.sources[s.signal].external and s.signal not in form.scales}
    # Two parts on hand are seldom alike, so that inverters have a ratio, and mostly a scale, of their own.
    counted = ("integrator", "summer") if target.resistor_piles is None else ("integrator", "summer", "inverter")
    for stage in patch.stages:
        if stage.kind not in counted or stage.bipolar or (stage.kind == "inverter" and stage.signal == "1"):
            continue
        here = scale[stage.node]
        for index, wire in enumerate(stage.wires):
            want = Affine(-log(abs(float(wire.coefficient)) * _knob(stage, patch)))
            want = want.plus(scale[wire.source]).plus(here, -1.0)
            if stage.kind == "integrator":
                want = want.plus(clock)
            elif stage.name in feedback:
                want = want.plus(Affine(0.0, {feedback[stage.name]: 1.0}))
            weight = weights.get((stage.name, index), 1.0)
            switched = wire.source if wire.source in switches else ""
            kind = "integrator" if stage.kind == "integrator" else "summer"
            ratios.append(Ratio(stage.name, index, kind, want, weight, switched))
        if stage.kind == "integrator" and stage.start and target.switch_on:
            want = here.plus(Affine(log(abs(float(stage.start)) / target.reference)))
            ratios.append(Ratio(stage.name, -1, "start", want, weights.get((stage.name, -1), 1.0)))
    return ratios


def _knob(stage: Stage, patch: Patch) -> float:
    return float(patch.knobs[stage.knob].size) if stage.knob else 1.0
