"""Scale factors, speed and purchasable values, decided together."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from math import exp, pi

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.horizon import within_horizon
from patchplan.patch.records import Patch, Stage
from patchplan.quantity import engineering
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.drift import (
    LIMITED,
    content_below,
    dc_limited,
    drift_share,
    limited_stages,
    offset_rate,
    slow_modes,
)
from patchplan.sizing.faults import find_faults, outside_note
from patchplan.sizing.loop_names import named_loops
from patchplan.sizing.loops import find_circuits
from patchplan.sizing.model import LEAST_USE, MOST_USE, Model, build_model
from patchplan.sizing.records import Coefficient, Leg, NodeScale, Sizing, StageSizing, Target
from patchplan.sizing.search import Effect
from patchplan.sizing.speed import Speed, choose_speed
from patchplan.sizing.stock import taken, without
from patchplan.sizing.stocked import choose_stocked
from patchplan.sizing.trial import choose_values
from patchplan.sizing.values import FEEDBACK, Values

Array = NDArray[np.float64]
#: The search may shift the planner's own speed by this factor either way.
SPEED_PLAY = 1.5
#: Most points in time, over all watched signals, at which errors are predicted during the search.
MOST_POINTS = 400
#: Inverters and start networks load an output by at most one over this of its rated load.
LIGHT = 4.0
#: Resistor after the wiper of a knob through zero: large against its track [ohm] (common practice, no source).
CROSSING_LEG = 4e4
#: A start value that comes out this many times too large is a fault, whatever its exact number.
LEAST_SHARE = 1e-6


def size(
    form: Form,
    patch: Patch,
    ranges: Ranges,
    sensitivity: Sensitivity,
    target: Target,
    *,
    speed: str | float = "free",
    run: str = "once",
    think: str = "normal",
    accept: float = 5.0,
) -> Sizing:
    """Choose volts per unit, time scale and all values.

    Parameters
    ----------
    speed
        "free", "real time", or how many times faster than the problem the circuit runs.
    run
        "once", "repeat" or "free"; a free run may need DC-limit resistors.
    think
        How many starting points the search takes: low, normal or high.
    accept
        Error allowed [% of peak]: a free run gets a DC-limit resistor where its drift exceeds that, and the resistor
        does less harm than the drift.
    """
    sensitivity = within_horizon(sensitivity, linear=form.system.is_linear)
    unit = float(form.system.time_unit_seconds)
    given = None if speed == "free" else unit if speed == "real time" else unit / float(speed)
    pace = choose_speed(form, patch, ranges, sensitivity, target, given=given)
    bounds = _speed_bounds(pace, given)
    limited = limited_stages(form, patch, ranges) if run == "free" else ()
    model = build_model(form, patch, ranges, target, bounds, _weights(patch, sensitivity))
    effect = _effect(model, patch, sensitivity, pace)
    values = _values(model, patch, target, effect, dict.fromkeys(limited, LIMITED), think)
    scales = _node_scales(patch, ranges, model, values)
    time_scale = exp(model.at(model.speed, values.theta))
    stages = _stages(patch, target, model, values, scales)
    for stage in (s for s in patch.stages if s.name in limited):
        sized, scale = stages[stage.name], scales[stage.node]
        left = without(target, *taken(patch, stages))
        if left.resistors:
            stages[stage.name] = dc_limited(stage, sized, scale, sensitivity, left, time_scale, accept / 100.0)
    loops = named_loops(find_circuits(model), model, patch, values.errors)
    sizing = Sizing(
        time_scale,
        pace.window,
        pace.limits,
        scales,
        stages,
        _coefficients(patch, model, values),
        tuple(loop.error for loop in loops if not loop.absorbed),
        find_faults(pace, given, unit, model, values, patch, target),
        speed_limits=pace.rows,
        loops=loops,
        outside=outside_note(pace, given, unit),
    )
    told = [sizing.outside] if sizing.outside else []
    notes = [*told, *_pair_notes(target, stages), *_drift_notes(form, patch, ranges, sensitivity, target, sizing)]
    return replace(sizing, notes=(*notes, *_content_notes(sizing, patch, ranges), *_use_notes(form, patch, scales)))


def _values(
    model: Model, patch: Patch, target: Target, effect: Effect, comfortable: Mapping[str, float], think: str
) -> Values:
    """Values of the parts on hand, or of those that can be bought."""
    if target.stocked:
        return choose_stocked(model, patch, target, effect, comfortable=comfortable, think=think)
    return choose_values(model, target, effect, comfortable=comfortable, think=think)


def _speed_bounds(pace: Speed, given: float | None) -> tuple[float, float]:
    """Time scales that the search may take: the one given, or a little around the one chosen."""
    if given is None:
        low, high = max(pace.window[0], pace.chosen / SPEED_PLAY), min(pace.window[1], pace.chosen * SPEED_PLAY)
        if low < high:
            return low, high
    return pace.chosen, pace.chosen


def _weights(patch: Patch, sensitivity: Sensitivity) -> dict[tuple[str, int], float]:
    """Weight of each coefficient: how far the watched signals move for it, never below a quarter of the largest."""
    if not sensitivity.wires or not sensitivity.watched:
        return {}
    moved = np.abs(sensitivity.coefficient).max(axis=(0, 2))
    most = float(moved.max()) or 1.0
    weights = {key: 0.25 + 0.75 * float(m) / most for key, m in zip(sensitivity.wires, moved, strict=True)}
    for stage in patch.stages:
        if stage.name in sensitivity.start:
            change = float(np.abs(sensitivity.start[stage.name]).max(initial=0.0)) * abs(float(stage.start))
            weights[stage.name, -1] = 0.25 + 0.75 * min(1.0, change / most)
    return weights


def _effect(model: Model, patch: Patch, sensitivity: Sensitivity, pace: Speed) -> Effect:
    """Watched signals' response to the model's rows, and what bandwidth and finite gain cost at the chosen speed.

    A residual above zero makes an integrator's or summer's coefficient smaller, but a start value larger.
    """
    starts = {s.name: float(s.start) for s in patch.stages if s.kind == "integrator"}
    at = {key: i for i, key in enumerate(sensitivity.wires)}
    stride = max(1, -(-len(sensitivity.watched) * len(sensitivity.times) // MOST_POINTS))
    columns = []
    for ratio in model.ratios:
        if ratio.kind == "start":
            moved = sensitivity.start[ratio.stage] * starts[ratio.stage]
        else:
            moved = -sensitivity.coefficient[:, at[ratio.stage, ratio.wire]]
        columns.append(moved[:, ::stride].ravel())
    base = (pace.lag / pace.chosen + pace.leak)[:, ::stride].ravel()
    return Effect(np.array(columns).reshape(len(columns), -1).T, base)


def _node_scales(patch: Patch, ranges: Ranges, model: Model, values: Values) -> dict[str, NodeScale]:
    scales = {}
    for stage in patch.stages:
        factor = exp(model.at(model.scale[stage.node], values.theta))
        peak = factor * ranges.nodes[stage.node].peak
        scales[stage.node] = NodeScale(stage.node, factor, peak, model.limit[stage.node])
    return scales


def _stages(
    patch: Patch, target: Target, model: Model, values: Values, scales: Mapping[str, NodeScale]
) -> dict[str, StageSizing]:
    """Values of all stages; knobs through zero take what the others leave."""
    stages = {s.name: _stage(s, target, model, values) for s in patch.stages if not s.bipolar}
    for stage in (s for s in patch.stages if s.bipolar):
        left = without(target, *taken(patch, stages))
        stages[stage.name] = bipolar_sizing(stage, patch, left if left.resistors else target, scales)
    return {s.name: stages[s.name] for s in patch.stages}


def _stage(stage: Stage, target: Target, model: Model, values: Values) -> StageSizing:
    """Values of one stage, from the parts that the search chose."""
    if stage.kind not in ("integrator", "summer", "inverter"):
        return StageSizing(stage.name)
    if stage.kind == "inverter" and (stage.name, 0) not in values.parts:
        both = _nearest(target.resistors, max(1e4, LIGHT * target.op_amp.load))
        return StageSizing(stage.name, (Leg((both,)),), feedback=both)
    legs = tuple(values.leg(stage.name, index) for index in range(len(stage.wires)))
    if stage.kind in ("summer", "inverter"):
        if stage.knob:
            return StageSizing(stage.name, legs, feedback=exp(values.theta[model.feedback[stage.name]]))
        feedback = values.parts.get((stage.name, "Rf"), (_nearest(target.resistors, 1e4),))[0]
        return StageSizing(stage.name, legs, feedback=feedback)
    capacitor = values.parts.get((stage.name, "C"), (_nearest(target.capacitors, 1e-8),))[0]
    start, volts = _start(stage, target, values)
    return StageSizing(stage.name, legs, capacitor, start=start, start_volts=volts)


def _start(stage: Stage, target: Target, values: Values) -> tuple[tuple[float, float] | None, float]:
    """Start resistors and the volts they give; none where the board has no hold."""
    if not target.switch_on:
        return None, 0.0
    if not stage.start:
        (hold,) = values.parts.get(
            (stage.name, "hold"), (_nearest(target.resistors, max(2e4, LIGHT * target.op_amp.load)),)
        )
        return (0.0, hold), 0.0
    first, second = values.parts[stage.name, -1]
    volts = target.reference * second / first
    return (first, second), volts * stage.sign * (1 if stage.start > 0 else -1)


def bipolar_sizing(stage: Stage, patch: Patch, target: Target, scales: Mapping[str, NodeScale]) -> StageSizing:
    """A knob through zero: full scale as little above the range's end as values and their tolerance allow."""
    knob = patch.knobs[stage.knob or ""]
    most = max(abs(float(knob.low)), abs(float(knob.high)))
    wire = stage.wires[0]
    gain = most * abs(float(wire.coefficient)) * scales[stage.node].volts_per_unit
    gain *= (1.0 + 2.0 * target.resistor_tolerance) / min(scales[w.source].volts_per_unit for w in stage.wires)
    values = np.array(target.resistors)
    feedback = np.array([r for r in target.resistors if FEEDBACK[0] <= r <= FEEDBACK[1]] or target.resistors)[:, None]
    excess = np.log(feedback / (gain * values))
    # A hundredth of excess is worth a factor of e away from the leg that suits the track.
    cost = excess + 0.01 * np.abs(np.log(values / CROSSING_LEG))
    fits = (excess >= -1e-9) & (feedback != values)
    row, column = np.unravel_index(int(np.argmin(np.where(fits, cost, 1e3 + np.abs(excess)))), cost.shape)
    return StageSizing(stage.name, (Leg((float(values[column]),)),), feedback=float(feedback[row, 0]))


def _nearest(values: tuple[float, ...], wanted: float) -> float:
    return min(values, key=lambda v: abs(np.log(v / wanted)))


def _coefficients(patch: Patch, model: Model, values: Values) -> tuple[Coefficient, ...]:
    """Wanted and realised numbers of every wire and start value."""
    by_name = {s.name: s for s in patch.stages}
    rows = []
    for ratio, error in zip(model.ratios, values.errors.tolist(), strict=True):
        stage = by_name[ratio.stage]
        if ratio.kind == "start":
            wanted = float(stage.start)
            rows.append(Coefficient(f"{stage.node}(0)", wanted, wanted / max(1.0 + error, LEAST_SHARE)))
        else:
            wire = stage.wires[ratio.wire]
            knob = patch.knobs[stage.knob] if stage.knob else None
            wanted = float(wire.coefficient * (knob.size * knob.sign if knob else 1))
            rows.append(Coefficient(f"{stage.node}<-{wire.source}", wanted, wanted * (1.0 + error)))
    return tuple(rows)


def _drift_notes(
    form: Form, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, target: Target, sizing: Sizing
) -> list[str]:
    """Which signals drift and how fast, for every mode near zero."""
    notes = []
    by_signal = {s.signal: s for s in patch.stages if s.kind == "integrator"}
    for state in dict.fromkeys(m.state for m in slow_modes(form, ranges, patch)):
        stage = by_signal[state]
        rate = offset_rate(sizing.stages[stage.name], target)
        factor = sizing.scales[stage.node].volts_per_unit
        share, seen = drift_share(stage.name, rate, sensitivity, factor, sizing.time_scale)
        text = f"{state} holds what offsets push into it: about {engineering(rate, 'V/s')} at {stage.node}"
        text += f", {100 * share:.2g} % of peak at {seen} by the end of the run" if seen else ""
        limit = sizing.stages[stage.name].feedback
        notes.append(text + (f"; {engineering(limit, 'Ω')} across its capacitor bounds it." if limit else "."))
    return notes


def _use_notes(form: Form, patch: Patch, scales: Mapping[str, NodeScale]) -> list[str]:
    """Which nodes swing over less than half or more than 95 % of their limit, and what sets them."""
    why: dict[str, list[str]] = {}
    for stage in patch.stages:
        scale = scales[stage.node]
        use = scale.peak_volts / scale.limit_volts
        if stage.kind == "reference" or LEAST_USE - 1e-6 <= use <= MOST_USE + 1e-6 or not scale.peak_volts:
            continue
        if stage.signal in form.scales:
            cause = "dictated by a terminal"
        elif stage.kind == "multiplier":
            cause = "products, set by their factors"
        elif stage.kind == "inverter":
            cause = "inverters, set by what they invert"
        else:
            cause = "switched from the reference" if stage.kind == "source" else "the values leave no better"
        why.setdefault(cause, []).append(f"{stage.node} {100 * use:.0f} %")
    start = "Over all that the ranges cover, tolerances and knobs too, outside 50 to 95 % of the limit"
    return [f"{start}, {cause}: {', '.join(nodes)}." for cause, nodes in why.items()]


def _pair_notes(target: Target, stages: Mapping[str, StageSizing]) -> list[str]:
    """That resistors are paired although nobody asked for it."""
    number = sum(bool(leg.join) for stage in stages.values() for leg in stage.legs)
    if target.pairs or not number:
        return []
    return [f"Pairs stand for {number} resistors, as single ones of the stock do not give the values."]


def _content_notes(sizing: Sizing, patch: Patch, ranges: Ranges) -> list[str]:
    """Watched signals with content below a decade above a DC-limit corner, where the integrator is of little use."""
    notes = []
    for stage in patch.stages:
        values = sizing.stages[stage.name]
        if stage.kind != "integrator" or not values.feedback:
            continue
        corner = sizing.time_scale / (2 * pi * values.feedback * values.capacitor)
        for signal, node in patch.watched.items():
            share = content_below(ranges.values[node], ranges.times, 10 * corner)
            if share > 0.01:
                notes.append(
                    f"{signal} has {100 * share:.0f} % of its content below {10 * corner:.3g} cycles per unit of time, "
                    f"ten times the DC-limit corner of {stage.name}: there the integrator is more than 1 % off."
                )
    return notes
