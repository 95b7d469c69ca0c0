"""How fast the circuit should run: the window, what limits each end, and the best place inside."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage
from patchplan.quantity import engineering
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.model import node_limits
from patchplan.sizing.networks import largest_transfer
from patchplan.sizing.records import Target

Array = NDArray[np.float64]
#: Predicted error of one cause, as a fraction of peak, at which it ends the window.
END_ERROR = 0.01
#: A faster plan is preferred while it costs no more than this fraction of peak over the best.
SLACK = 1e-4
#: Resistance that the capacitors are chosen for [ohm]; between the 5k that loads outputs and the 1M that strays and
#: bias currents disturb (common practice, no source).
COMFORTABLE = 5e4
#: The planner's own speed keeps capacitors at or above this, so that some 10 pF of wiring and input capacitance count
#: for 0.1 % at most [F] (common practice, no source).
ABOVE_STRAYS = 1e-8


@dataclass(frozen=True)
class Speed:
    """The window of the time scale [circuit s per unit of problem time] and the choice in it.

    ``predicted`` is the error expected from bandwidth and bias current at the chosen speed, as a fraction of peak;
    ``lag`` the error by bandwidth alone, times the time scale, and ``leak`` the one by finite gain, both of shape
    ``(n_watched, n_times)``.
    """

    window: tuple[float, float]
    limits: tuple[str, str]
    chosen: float
    predicted: float
    lag: Array
    leak: Array


def middle_scales(form: Form, patch: Patch, ranges: Ranges, target: Target) -> dict[str, float]:
    """Volts per unit of every node with swings at the middle of what is allowed; used before values are chosen."""
    limit = node_limits(patch, target)
    scales: dict[str, float] = {}
    for stage in patch.stages:
        if stage.kind == "reference":
            scales[stage.node] = target.reference
        elif stage.kind == "inverter":
            scales[stage.node] = scales[stage.wires[0].source]
        elif stage.kind == "multiplier":
            left, right = (scales[w.source] for w in stage.wires)
            scales[stage.node] = left * right / target.multiplier.scale
        elif stage.signal in form.scales:
            scales[stage.node] = abs(float(form.scales[stage.signal]))
        else:
            scales[stage.node] = 0.7 * limit[stage.node] / (ranges.nodes[stage.node].peak or 1.0)
    return scales


def integrator_gains(patch: Patch, scales: Mapping[str, float]) -> dict[str, Array]:
    """Integrator -> gains times time scale: |a|*S/S_source of each wire [1/problem time]."""
    return {
        s.name: np.array([abs(float(w.coefficient)) * scales[s.node] / scales[w.source] for w in s.wires])
        for s in patch.stages
        if s.kind == "integrator"
    }


def summer_gains(stage: Stage, patch: Patch, scales: Mapping[str, float]) -> float:
    """Sum of the gains of a summer or inverter."""
    knob = abs(float(patch.knobs[stage.knob].value)) if stage.knob else 1.0
    return sum(abs(float(w.coefficient)) * knob * scales[stage.node] / scales[w.source] for w in stage.wires)


def choose_speed(
    form: Form, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, target: Target, *, given: float | None = None
) -> Speed:
    """Find the window and the time scale to aim at.

    Parameters
    ----------
    given
        Time scale asked for, else None for the planner's choice: the fastest whose predicted error is within
        :data:`SLACK` of the least.
    """
    scales = middle_scales(form, patch, ranges, target)
    gains = integrator_gains(patch, scales)
    parts = lag_errors(patch, sensitivity, target, scales)
    late = parts[0] + parts[1]
    lag = float(np.max(np.abs(late), initial=0.0))
    low, low_text = max(_fast_ends(patch, ranges, target, scales, gains, parts))
    high, high_text = min(_slow_ends(patch, sensitivity, target, scales, gains))
    low = low or 1e-6 * high  # nothing moves, so that nothing limits the speed either
    plain = min(high, _plain_end(target, gains))
    if given is not None:
        chosen = given
    elif low >= high:
        chosen = float(np.sqrt(low * high))
    else:
        grid = np.geomspace(low, plain if low < plain else high, 81)
        error = lag / grid + bias_error(patch, sensitivity, target, scales, gains, grid)
        good = (error <= 1.1 * error.min() + SLACK) & (grid >= min(grid[-1], _above_strays(gains)))
        chosen = float(grid[np.argmax(good)] if good.any() else grid[np.argmin(error)])
    bias = float(bias_error(patch, sensitivity, target, scales, gains, np.array([chosen]))[0])
    leak = leak_error(patch, sensitivity, target, scales, gains)
    return Speed((low, high), (low_text, high_text), chosen, lag / chosen + bias, late, leak)


def _plain_end(target: Target, gains: Mapping[str, Array]) -> float:
    """Highest time scale at which every leg is a single resistor."""
    largest = target.resistors[-1] * target.capacitors[-1]
    return min((float(g.min()) * largest for g in gains.values() if g.size), default=np.inf)


def _above_strays(gains: Mapping[str, Array]) -> float:
    """Time scale at which the fastest stage's capacitor is :data:`ABOVE_STRAYS` at comfortable resistors."""
    middles = [float(np.sqrt(g.min() * g.max())) for g in gains.values() if g.size]
    return max(middles, default=0.0) * COMFORTABLE * ABOVE_STRAYS


def lag_errors(
    patch: Patch, sensitivity: Sensitivity, target: Target, scales: Mapping[str, float]
) -> tuple[Array, Array]:
    """Errors by the op amps' and by the multipliers' finite bandwidth, times the time scale.

    Each integrator is late by 1/w_t, each summer and inverter by its noise gain over w_t, each multiplier by one over
    its bandwidth.

    Returns
    -------
    tuple of Array
        Shapes ``(n_watched, n_times)`` [fraction of peak * s].
    """
    by_name = {s.name: s for s in patch.stages}
    stages = [by_name[name] for name in sensitivity.stages]
    noise_gain = [1.0 if s.kind == "integrator" else 1.0 + summer_gains(s, patch, scales) for s in stages]
    multiplies = np.array([s.kind == "multiplier" for s in stages], dtype=bool)
    late = np.where(multiplies, 1.0 / target.multiplier.bandwidth, np.array(noise_gain) / target.op_amp.gain_bandwidth)
    by_op_amp = np.einsum("wst,s->wt", sensitivity.lag, np.where(multiplies, 0.0, late))
    return by_op_amp, np.einsum("wst,s->wt", sensitivity.lag, np.where(multiplies, late, 0.0))


def leak_error(
    patch: Patch,
    sensitivity: Sensitivity,
    target: Target,
    scales: Mapping[str, float],
    gains: Mapping[str, Array],
) -> Array:
    """Error by finite DC gain, the same at every speed, shape ``(n_watched, n_times)`` [fraction of peak].

    An integrator of gains g forgets its value at the rate sum(g)/A0, a summer of noise gain NG comes out NG/A0 low.
    """
    at = {key: i for i, key in enumerate(sensitivity.wires)}
    total = np.zeros((len(sensitivity.watched), len(sensitivity.times)))
    for stage in patch.stages:
        if stage.name in sensitivity.leak:
            total += sensitivity.leak[stage.name] * float(gains[stage.name].sum()) / target.op_amp.gain
        elif stage.kind in ("summer", "inverter"):
            low = (1.0 + summer_gains(stage, patch, scales)) / target.op_amp.gain
            own = [at[stage.name, i] for i in range(len(stage.wires)) if (stage.name, i) in at]
            total -= low * sensitivity.coefficient[:, own].sum(axis=1)
    return total


def bias_error(
    patch: Patch,
    sensitivity: Sensitivity,
    target: Target,
    scales: Mapping[str, float],
    gains: Mapping[str, Array],
    time_scales: Array,
) -> Array:
    """Error by bias current and switch leakage into the capacitors chosen for each time scale, fraction of peak.

    ``time_scales`` has the shape ``(n,)``, and so has what comes out.
    """
    node = {s.name: s.node for s in patch.stages}
    moved = np.abs(sensitivity.rate).max(axis=(0, 2), initial=0.0)
    total = np.zeros(len(time_scales))
    for index, name in enumerate(sensitivity.stages):
        if name in gains:
            capacitors = comfortable_capacitors(gains[name], target, time_scales)
            total += time_scales / capacitors * (float(moved[index]) / scales[node[name]])
    return (target.op_amp.bias + target.switch_leakage) * total


def comfortable_capacitors(gains: Array, target: Target, time_scales: Array) -> Array:
    """Capacitance [F] that puts the middle of a stage's resistors at :data:`COMFORTABLE`, for each time scale."""
    if gains.size == 0:
        return np.full(len(time_scales), target.capacitors[len(target.capacitors) // 2])
    middle = float(np.sqrt(gains.min() * gains.max()))
    return np.clip(time_scales / (middle * COMFORTABLE), target.capacitors[0], target.capacitors[-1])


def _fast_ends(
    patch: Patch,
    ranges: Ranges,
    target: Target,
    scales: Mapping[str, float],
    gains: Mapping[str, Array],
    lags: tuple[Array, Array],
) -> list[tuple[float, str]]:
    """Lowest time scale by each cause, with its sentence."""
    smallest = target.resistors[0] * target.capacitors[0]
    ends = [
        (
            float(np.max(np.abs(lag), initial=0.0)) / END_ERROR,
            f"bandwidth of {part}, which costs {100 * END_ERROR:g} % of peak",
        )
        for lag, part in zip(lags, (target.op_amp.name, target.multiplier.name), strict=True)
    ]
    for stage in patch.stages:
        rate = ranges.nodes[stage.node].rate
        if stage.kind in ("reference", "source") or not np.isfinite(rate):
            continue
        slew, part = target.op_amp.slew, target.op_amp.name
        if stage.kind == "multiplier":
            slew, part = target.multiplier.slew, target.multiplier.name
        ends.append((2.0 * scales[stage.node] * rate / slew, f"slew rate of {part} at node {stage.node}, twice over"))
    for name, values in gains.items():
        if values.size:
            text = f"smallest resistor times smallest capacitor, {engineering(smallest, 's')}, at {name}"
            ends.append((float(values.max()) * smallest, text))
    return ends


def _slow_ends(
    patch: Patch,
    sensitivity: Sensitivity,
    target: Target,
    scales: Mapping[str, float],
    gains: Mapping[str, Array],
) -> list[tuple[float, str]]:
    """Highest time scale by each cause, with its sentence."""
    largest = largest_transfer(target.resistors) * target.capacitors[-1]
    ends = []
    for name, values in gains.items():
        if values.size:
            text = f"largest T of resistors times largest capacitor, {engineering(largest, 's')}, at {name}"
            ends.append((float(values.min()) * largest, text))
    slow = float(bias_error(patch, sensitivity, target, scales, gains, np.array([1e6]))[0])
    if slow > 0:
        # At a very slow speed every capacitor sits at its largest, so the error is proportional to the time scale.
        text = f"bias current of {target.op_amp.name} into the largest capacitor costs {100 * END_ERROR:g} % of peak"
        ends.append((1e6 * END_ERROR / slow, text))
    return ends or [(1.0, "no integrator limits it")]
