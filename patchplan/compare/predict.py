"""The error of a sized board without a simulation: linear responses times what its parts are off by."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from patchplan.check.horizon import horizon_of
from patchplan.check.records import Cause
from patchplan.check.spread import spread_of
from patchplan.equation.system import System
from patchplan.patch.records import Patch, Stage
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, Target

Array = NDArray[np.float64]
#: Share of the slew rate from which on a board is taken as one that cannot follow.
MOST_SLEW = 0.99


def predicted_error(
    system: System, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, sizing: Sizing, target: Target
) -> tuple[float, tuple[Cause, ...]]:
    """Largest error of the nominal board [% of peak] and its causes, largest first.

    The causes are those of the check's budget; as they are responses over time with their signs, they may cancel, and
    the error may be smaller than the largest of them.
    """
    rows = _rows(system, patch, sensitivity, sizing)
    causes = {
        "rounding": _rounding(patch, sensitivity, sizing),
        "bandwidth": _lag(patch, ranges, sensitivity, sizing, target, "op amps"),
        "multiplier bandwidth": _lag(patch, ranges, sensitivity, sizing, target, "multipliers"),
        "slew": _lag(patch, ranges, sensitivity, sizing, target, "slew"),
        "finite gain": _finite_gain(patch, sensitivity, sizing, target),
        "bias current": _bias(patch, sensitivity, sizing, target),
        "DC-limit resistor": _dc_limit(patch, sensitivity, sizing),
    }
    total = _largest(sum(causes.values(), np.zeros((1, 1))), rows)
    listed = [Cause(name, _largest(share, rows)) for name, share in causes.items() if share.any()]
    return total, tuple(sorted(listed, key=lambda cause: -cause.error_percent))


def predicted_spread(
    system: System,
    patch: Patch,
    sensitivity: Sensitivity,
    sizing: Sizing,
    target: Target,
    *,
    like: Sizing | None = None,
) -> tuple[float, tuple[Cause, ...]]:
    """Standard deviation between boards [% of peak], as the check gives it, and its causes, largest first.

    ``like`` as for :func:`patchplan.check.spread.spread_of`.
    """
    rows = _rows(system, patch, sensitivity, sizing)
    causes = spread_of(sensitivity, patch, sizing, target, like=like)
    total = np.sqrt(sum((share**2 for share in causes.values()), np.zeros((1, 1))))
    listed = [Cause(name, _largest(share, rows)) for name, share in causes.items() if share.any()]
    return _largest(total, rows), tuple(sorted(listed, key=lambda cause: -cause.error_percent))


def _rows(system: System, patch: Patch, sensitivity: Sensitivity, sizing: Sizing) -> NDArray[np.bool_]:
    """Times up to the horizon, shape ``(n_times,)``."""
    horizon = horizon_of(system, sensitivity, patch, sizing)
    within: NDArray[np.bool_] = sensitivity.times <= (np.inf if horizon is None else horizon)
    return within


def _largest(share: Array, rows: NDArray[np.bool_]) -> float:
    """Largest magnitude in percent."""
    seen = np.broadcast_to(share, (share.shape[0], rows.size))[:, rows]
    return 100.0 * float(np.abs(seen).max(initial=0.0))


def _zeros(sensitivity: Sensitivity) -> Array:
    return np.zeros((len(sensitivity.watched), len(sensitivity.times)))


def _rounding(patch: Patch, sensitivity: Sensitivity, sizing: Sizing) -> Array:
    """What coefficients and start values that are off do, shape ``(n_watched, n_times)``, as all below."""
    off = {c.at: c.realised / c.wanted - 1.0 for c in sizing.coefficients if c.wanted}
    stages = {s.name: s for s in patch.stages}
    total = _zeros(sensitivity)
    for i, (name, wire) in enumerate(sensitivity.wires):
        stage = stages[name]
        total += sensitivity.coefficient[:, i] * off.get(f"{stage.node}<-{stage.wires[wire].source}", 0.0)
    for name, response in sensitivity.start.items():
        stage = stages[name]
        total += response * float(stage.start) * off.get(f"{stage.node}(0)", 0.0)
    return total


def _lag(patch: Patch, ranges: Ranges, sensitivity: Sensitivity, sizing: Sizing, target: Target, cause: str) -> Array:
    """What lateness does: by the bandwidth of the op amps, of the multipliers, or what slew adds to both.

    The model's op amp slews as tanh: at a share u of its slew rate it is late by atanh(u)/u times as much.
    """
    stages = {s.name: s for s in patch.stages}
    late = np.zeros(len(sensitivity.stages))
    for i, name in enumerate(sensitivity.stages):
        stage = stages[name]
        multiplies = stage.kind == "multiplier"
        part = target.multiplier if multiplies else target.op_amp
        if cause == "slew":
            share = slew_share(stage, ranges, sizing, part.slew)
            factor = np.arctanh(share) / share - 1.0 if share > 0.0 else 0.0
        else:
            factor = float(multiplies == (cause == "multipliers"))
        gain = 1.0 if multiplies or stage.kind == "integrator" else _noise_gain(stage, sizing)
        late[i] = factor * gain / (target.multiplier.bandwidth if multiplies else target.op_amp.gain_bandwidth)
    result: Array = np.einsum("wst,s->wt", sensitivity.lag, late / sizing.time_scale)
    return result


def slew_share(stage: Stage, ranges: Ranges, sizing: Sizing, slew: float) -> float:
    """Steepest slope of a stage's output over the nominal run, jumps apart, as a share of ``slew`` [V/s]."""
    steepest = float(np.abs(ranges.rates[stage.node]).max(initial=0.0))
    volts = sizing.scales[stage.node].volts_per_unit * steepest / sizing.time_scale
    return min(volts / slew, MOST_SLEW)


def _noise_gain(stage: Stage, sizing: Sizing) -> float:
    sized = sizing.stages[stage.name]
    return 1.0 + sized.feedback * sum(1.0 / leg.into for leg in sized.legs)


def _finite_gain(patch: Patch, sensitivity: Sensitivity, sizing: Sizing, target: Target) -> Array:
    """What finite DC gain A0 does.

    An integrator of gains g forgets its value at the rate sum(g)/A0 and is slow by 1/A0; a summer comes out its noise
    gain over A0 low.
    """
    own = _own_wires(sensitivity)
    total = _zeros(sensitivity)
    for stage in patch.stages:
        low = 1.0
        if stage.name in sensitivity.leak:
            sized = sizing.stages[stage.name]
            gains = sum(1.0 / leg.into for leg in sized.legs) / sized.capacitor * sizing.time_scale
            total += sensitivity.leak[stage.name] * gains
        elif stage.kind in ("summer", "inverter"):
            low = _noise_gain(stage, sizing)
        total -= low * sensitivity.coefficient[:, own.get(stage.name, [])].sum(axis=1)
    return total / target.op_amp.gain


def _own_wires(sensitivity: Sensitivity) -> Mapping[str, list[int]]:
    own: dict[str, list[int]] = {}
    for i, (name, _) in enumerate(sensitivity.wires):
        own.setdefault(name, []).append(i)
    return own


def _bias(patch: Patch, sensitivity: Sensitivity, sizing: Sizing, target: Target) -> Array:
    """Current out of a summing node lifts the output: Ib/C a second at an integrator, Rf*Ib at a summer.

    In hold it lifts an integrator's start by Ib times the feedback of the start network.
    """
    stages = {s.name: s for s in patch.stages}
    total = _zeros(sensitivity)
    for i, name in enumerate(sensitivity.stages):
        stage, sized = stages[name], sizing.stages[name]
        volts = stage.sign * sizing.scales[stage.node].volts_per_unit
        if stage.kind == "integrator":
            total += sensitivity.rate[:, i] * target.op_amp.bias / sized.capacitor * sizing.time_scale / volts
            if sized.start is not None and name in sensitivity.start:
                total += sensitivity.start[name] * target.op_amp.bias * sized.start[1] / volts
        elif stage.kind != "multiplier":
            total += sensitivity.rate[:, i] * target.op_amp.bias * sized.feedback / volts
    return total


def _dc_limit(patch: Patch, sensitivity: Sensitivity, sizing: Sizing) -> Array:
    total = _zeros(sensitivity)
    for stage in patch.stages:
        sized = sizing.stages.get(stage.name)
        if stage.name in sensitivity.leak and sized is not None and sized.feedback:
            total += sensitivity.leak[stage.name] * sizing.time_scale / (sized.feedback * sized.capacitor)
    return total
