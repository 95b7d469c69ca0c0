"""How far boards of one design differ from each other, from the linear sensitivities."""

from __future__ import annotations

from collections.abc import Container
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from patchplan.circuit.switched import switched_volts
from patchplan.patch.records import Patch, Stage
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, StageSizing, Target
from patchplan.sizing.tolerances import tolerance_columns
from patchplan.sizing.trimming import trimmed_by

Array = NDArray[np.float64]


def spread_of(
    sensitivity: Sensitivity, patch: Patch, sizing: Sizing, target: Target, *, like: Sizing | None = None
) -> dict[str, Array]:
    """Standard deviation between boards by cause, each of shape ``(n_watched, n_times)``, fraction of the error base.

    Parameters
    ----------
    sensitivity, patch, sizing, target
        The plan; a tolerance t is taken as uniform, sigma = t / sqrt(3). Trimmers on the board take up what they can.
    like
        A board of real parts whose tolerances and trimmers count, where ``sizing`` is one of exact values.

    Returns
    -------
    dict
        ``resistors``, ``capacitors``, ``reference``, ``offsets``, ``multipliers``. Causes are independent.
    """
    resistor = target.resistor_tolerance / sqrt(3)
    columns = tolerance_columns(sensitivity, patch, sizing, target, like=like) | {"reference": [], "offsets": []}
    wires = {key: i for i, key in enumerate(sensitivity.wires)}
    stages = {name: i for i, name in enumerate(sensitivity.stages)}
    for stage in patch.stages:
        if stage.kind in ("reference", "source") or stage.name not in stages:
            continue
        rate = sensitivity.rate[:, stages[stage.name]]
        volts = sizing.scales[stage.node].volts_per_unit
        if stage.kind == "multiplier":
            columns["multipliers"].append(target.multiplier.offset / volts * rate)
            continue
        sized = sizing.stages[stage.name]
        drift = target.op_amp.offset * _offset_gain(stage, sized, sizing.time_scale) / volts
        columns["offsets"].append(drift * _leaked(sensitivity.times, stage, sized, sizing.time_scale) * rate)
    steps = _steps(sensitivity, patch, sizing, target)
    low = _through(sensitivity, patch, wires, {node for node, volts in steps.items() if volts < 0.0})
    high = _through(sensitivity, patch, wires, {node for node, volts in steps.items() if volts > 0.0})
    # The resistors of the inverter on the reference move every step to its other polarity.
    columns["resistors"].append(sqrt(2) * resistor * low)
    reference = _reference(sensitivity, patch, sizing, wires) + low + high
    columns["reference"].append(target.reference_tolerance / sqrt(3) * reference)
    shape = sensitivity.coefficient.shape[::2]
    trimmed = trimmed_by((like or sizing).trimming, sensitivity, patch, sizing)
    return {cause: np.sqrt(sum((trimmed(x) ** 2 for x in list_), np.zeros(shape))) for cause, list_ in columns.items()}


def _reference(sensitivity: Sensitivity, patch: Patch, sizing: Sizing, wires: dict[tuple[str, int], int]) -> Array:
    """Response to a relative change of the reference, shape ``(n_watched, n_times)``."""
    total = np.zeros(sensitivity.coefficient.shape[::2])
    references = {s.node for s in patch.stages if s.kind == "reference"}
    total += _through(sensitivity, patch, wires, references)
    for stage in patch.stages:
        sized = sizing.stages.get(stage.name)
        if stage.kind == "integrator" and sized is not None and sized.start is not None and sized.start[0]:
            volts = stage.sign * sizing.scales[stage.node].volts_per_unit
            total += sensitivity.start[stage.name] * sized.start_volts / volts
    return total


def _steps(sensitivity: Sensitivity, patch: Patch, sizing: Sizing, target: Target) -> dict[str, float]:
    """Volts while on, by node, of the steps that are made from the reference."""
    volts = switched_volts(patch, sizing, target, float(sensitivity.times[-1]))
    return {stage.node: volts[stage.name] for stage in patch.stages if stage.name in volts}


def _through(sensitivity: Sensitivity, patch: Patch, wires: dict[tuple[str, int], int], nodes: Container[str]) -> Array:
    """Response to a relative change of all wires from some nodes together, shape ``(n_watched, n_times)``."""
    total = np.zeros(sensitivity.coefficient.shape[::2])
    for stage in patch.stages:
        for i, wire in enumerate(stage.wires):
            if wire.source in nodes and (stage.name, i) in wires:
                total += sensitivity.coefficient[:, wires[stage.name, i]]
    return total


def _offset_gain(stage: Stage, sized: StageSizing, time_scale: float) -> float:
    """Volts at the output, or volts per unit of problem time of an integrator, for one volt of offset."""
    conductance = sum(1.0 / leg.into for leg in sized.legs)
    if stage.kind == "integrator":
        feedback = 1.0 / sized.feedback if sized.feedback else 0.0
        return (conductance + feedback) / sized.capacitor * time_scale
    return 1.0 + sized.feedback * conductance


def _leaked(times: Array, stage: Stage, sized: StageSizing, time_scale: float) -> Array:
    """Share of a drift that a DC-limit resistor lets stand, shape ``(n_times,)``.

    The sensitivities know of no such resistor; a ramp t becomes tau*(1 - exp(-t/tau)), exact for a lone integrator.
    """
    if stage.kind != "integrator" or not sized.feedback:
        return np.ones(len(times))
    x = np.maximum(times * time_scale / (sized.feedback * sized.capacitor), 1e-12)
    return np.asarray(-np.expm1(-x) / x)
