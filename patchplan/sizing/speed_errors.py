"""What the parts' figures cost in error, against the time scale."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.model import node_limits
from patchplan.sizing.records import Target

Array = NDArray[np.float64]
#: Resistance that the capacitors are chosen for [ohm]; between the 5k that loads outputs and the 1M that strays and
#: bias currents disturb (common practice, no source).
COMFORTABLE = 5e4


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
    knob = float(patch.knobs[stage.knob].size) if stage.knob else 1.0
    return sum(abs(float(w.coefficient)) * knob * scales[stage.node] / scales[w.source] for w in stage.wires)


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
    late, multiplies = late_stages(patch, sensitivity, target, scales)
    by_op_amp = np.einsum("wst,s->wt", sensitivity.lag, np.where(multiplies, 0.0, late))
    return by_op_amp, np.einsum("wst,s->wt", sensitivity.lag, np.where(multiplies, late, 0.0))


def late_stages(
    patch: Patch, sensitivity: Sensitivity, target: Target, scales: Mapping[str, float]
) -> tuple[Array, NDArray[np.bool_]]:
    """By how much each of the Sensitivity's stages is late [circuit s], and which of them are multipliers."""
    by_name = {s.name: s for s in patch.stages}
    stages = [by_name[name] for name in sensitivity.stages]
    noise_gain = [1.0 if s.kind == "integrator" else 1.0 + summer_gains(s, patch, scales) for s in stages]
    multiplies = np.array([s.kind == "multiplier" for s in stages], dtype=bool)
    late = np.where(multiplies, 1.0 / target.multiplier.bandwidth, np.array(noise_gain) / target.op_amp.gain_bandwidth)
    return late, multiplies


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


def comfortable_capacitors(gains: Array, target: Target, time_scales: Array, comfortable: float = COMFORTABLE) -> Array:
    """Capacitance [F] that puts the middle of a stage's resistors at ``comfortable`` [ohm], for each time scale.

    It moves from there as far as the largest and smallest resistors ask for.
    """
    if gains.size == 0:
        return np.full(len(time_scales), target.capacitors[len(target.capacitors) // 2])
    middle = float(np.sqrt(gains.min() * gains.max()))
    wanted = np.maximum(time_scales / (middle * comfortable), time_scales / (gains.min() * target.resistors[-1]))
    wanted = np.minimum(wanted, time_scales / (gains.max() * target.resistors[0]))
    return np.asarray(np.clip(wanted, target.capacitors[0], target.capacitors[-1]))
