"""The board that would run at a given speed if every value could be had: what speeds are compared by."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.records import Patch, Stage
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.drift import LIMITED, dc_limited
from patchplan.sizing.networks import exact_leg
from patchplan.sizing.records import Leg, NodeScale, Sizing, StageSizing, Target
from patchplan.sizing.size import LIGHT, bipolar_sizing
from patchplan.sizing.speed_errors import COMFORTABLE, comfortable_capacitors
from patchplan.sizing.values import FEEDBACK, START_FEEDBACK

Array = NDArray[np.float64]
#: Rounds in which switches' and bandwidth's share of R*C is settled; each is some 1e-3 of the one before.
_ROUNDS = 2


def exact_sizing(
    patch: Patch,
    scales: Mapping[str, NodeScale],
    target: Target,
    time_scale: float,
    *,
    limited: Collection[str] = (),
    sensitivity: Sensitivity | None = None,
    allowed: float = 0.05,
) -> Sizing:
    """Values that give every coefficient exactly at a time scale, chosen as the search would choose their size.

    What the operate switches, the switches of steps and the op amps' bandwidth take of R*C is counted, as it is in the
    search; lag, finite gain and all else that no single value makes up for is left.

    Parameters
    ----------
    scales
        Volts per unit of every node.
    limited
        Integrators that may get a DC-limit resistor (:func:`patchplan.sizing.drift.limited_stages`), with the
        ``sensitivity`` and the share of peak that drift may take.
    """
    gains = {s.name: wanted_gains(s, patch, scales) for s in patch.stages}
    stages = {
        s.name: _stage(
            s, patch, scales, target, time_scale, gains[s.name], LIMITED if s.name in limited else COMFORTABLE
        )
        for s in patch.stages
    }
    for name in _switched(patch, scales, target):
        stages = _behind_switch(name, patch, target, stages)
    for stage in (s for s in patch.stages if s.name in limited and sensitivity is not None):
        assert sensitivity is not None
        sized, scale = stages[stage.name], scales[stage.node]
        stages[stage.name] = dc_limited(stage, sized, scale, sensitivity, target, time_scale, allowed)
    return Sizing(time_scale, (0.0, np.inf), ("", ""), scales, stages, ())


def wanted_gains(stage: Stage, patch: Patch, scales: Mapping[str, NodeScale]) -> Array:
    """|a| * S / S_source of each wire: [1/problem time] for integrators, [V/V] for summers."""
    knob = float(patch.knobs[stage.knob].size) if stage.knob else 1.0
    here = scales[stage.node].volts_per_unit
    return np.array([abs(float(w.coefficient)) * knob * here / scales[w.source].volts_per_unit for w in stage.wires])


def _stage(
    stage: Stage,
    patch: Patch,
    scales: Mapping[str, NodeScale],
    target: Target,
    time_scale: float,
    gains: Array,
    comfortable: float,
) -> StageSizing:
    if stage.kind == "integrator":
        return _integrator(stage, scales[stage.node], target, time_scale, gains, comfortable)
    if stage.kind == "inverter":
        ohm = max(1e4, LIGHT * target.op_amp.load)
        return StageSizing(stage.name, (Leg((ohm,)),), feedback=ohm)
    if stage.kind != "summer":
        return StageSizing(stage.name)
    if stage.bipolar:
        return bipolar_sizing(stage, patch, target, scales)
    middle = float(np.sqrt(gains.min() * gains.max())) or 1.0
    feedback = float(np.clip(START_FEEDBACK * np.sqrt(middle), *FEEDBACK))
    legs = tuple(exact_leg(feedback / max(gain, 1e-12), target.resistors) for gain in gains.tolist())
    return StageSizing(stage.name, legs, feedback=feedback)


def _integrator(
    stage: Stage, scale: NodeScale, target: Target, time_scale: float, gains: Array, comfortable: float
) -> StageSizing:
    capacitor = float(comfortable_capacitors(gains, target, np.array([time_scale]), comfortable)[0])
    wanted = (time_scale / (gains * capacitor)).tolist()
    legs = tuple(exact_leg(ohm, target.resistors) for ohm in wanted)
    for _ in range(_ROUNDS):
        seen = sum(1.0 / leg.into for leg in legs)
        taken = seen * (target.switch_on + 1.0 / (capacitor * target.op_amp.gain_bandwidth))
        legs = tuple(exact_leg(ohm / (1.0 + taken), target.resistors) for ohm in wanted)
    volts = stage.sign * scale.volts_per_unit * float(stage.start)
    start = (START_FEEDBACK * target.reference / abs(volts) if volts else 0.0, START_FEEDBACK)
    return StageSizing(stage.name, legs, capacitor, start=start if target.switch_on else None, start_volts=volts)


def _switched(patch: Patch, scales: Mapping[str, NodeScale], target: Target) -> list[str]:
    """Nodes of the steps that the board switches from its reference."""
    return [
        s.node
        for s in patch.stages
        if s.kind == "source"
        and not patch.sources[s.signal].external
        and np.isclose(scales[s.node].peak_volts, target.reference)
    ]


def _behind_switch(
    node: str, patch: Patch, target: Target, stages: Mapping[str, StageSizing]
) -> dict[str, StageSizing]:
    """The stages with the resistance of a step's switch, which all legs from its node share, taken off their legs."""
    fed = [(s.name, i) for s in patch.stages for i, w in enumerate(s.wires) if w.source == node]
    legs = {(name, i): stages[name].legs[i] for name, i in fed if i < len(stages[name].legs)}
    taken = target.switch_on * sum(1.0 / leg.load for leg in legs.values())
    found = dict(stages)
    for (name, i), leg in legs.items():
        less = exact_leg(leg.transfer / (1.0 + taken), target.resistors)
        own = found[name].legs
        found[name] = replace(found[name], legs=(*own[:i], less, *own[i + 1 :]))
    return found
