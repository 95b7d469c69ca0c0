"""What the tolerances of resistors, capacitors and multipliers do to the watched signals, part by part."""

from __future__ import annotations

from math import hypot, sqrt

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.records import Patch
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, Target
from patchplan.sizing.stock import tolerance_of

Array = NDArray[np.float64]


def tolerance_columns(sensitivity: Sensitivity, patch: Patch, sizing: Sizing, target: Target) -> dict[str, list[Array]]:
    """Signed responses to one standard deviation of each part, by cause, of shape ``(n_watched, n_times)``.

    They are fractions of the error base. A tolerance t is taken as uniform, sigma = t / sqrt(3); a multiplier's scale
    error is its typical figure. Causes are
    ``resistors``, ``capacitors`` and ``multipliers``.
    """

    def sigma(value: float) -> float:
        return tolerance_of(value, target.resistor_piles, target.resistor_tolerance) / sqrt(3)

    columns: dict[str, list[Array]] = {"resistors": [], "capacitors": [], "multipliers": []}
    wires = {key: i for i, key in enumerate(sensitivity.wires)}
    for stage in patch.stages:
        own = [
            sensitivity.coefficient[:, wires[key]] for i in range(len(stage.wires)) if (key := (stage.name, i)) in wires
        ]
        if not own and stage.name not in sensitivity.start:
            continue
        if stage.kind == "multiplier":
            columns["multipliers"] += [target.multiplier.scale_error * x for x in own]
            continue
        sized = sizing.stages[stage.name]
        for leg, response in zip(sized.legs, own, strict=False):
            off = [share * sigma(ohm) for share, ohm in zip(leg.shares, leg.resistors, strict=True)]
            columns["resistors"].append(hypot(*off) * response)
        shared = np.sum(own, axis=0) if own else np.zeros(sensitivity.coefficient.shape[::2])
        if stage.kind == "integrator":
            farads = tolerance_of(sized.capacitor, target.capacitor_piles, target.capacitor_tolerance)
            columns["capacitors"].append(farads / sqrt(3) * shared)
        else:
            columns["resistors"].append(sigma(sized.feedback) * shared)
        if sized.start is not None and sized.start[0]:
            start = sensitivity.start[stage.name] * sized.start_volts / sizing.scales[stage.node].volts_per_unit
            columns["resistors"].append(hypot(*map(sigma, sized.start)) * start)
    return columns
