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


def tolerance_columns(
    sensitivity: Sensitivity, patch: Patch, sizing: Sizing, target: Target, *, like: Sizing | None = None
) -> dict[str, list[Array]]:
    """Signed responses to one standard deviation of each part, by cause, of shape ``(n_watched, n_times)``.

    They are fractions of the error base. A tolerance t is taken as uniform, sigma = t / sqrt(3); a multiplier's scale
    error is its typical figure. Causes are
    ``resistors``, ``capacitors`` and ``multipliers``.

    Parameters
    ----------
    like
        A board of real parts whose tolerances count, where ``sizing`` has values that no stock holds.
    """
    parts = like or sizing

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
        sized, real = sizing.stages[stage.name], parts.stages[stage.name]
        for leg, made, response in zip(sized.legs, real.legs, own, strict=False):
            off = hypot(*(share * sigma(ohm) for share, ohm in zip(made.shares, made.resistors, strict=True)))
            # A pair stays a pair at every speed, but networks come and go.
            off *= leg.spread / made.spread if leg.is_network or made.is_network else 1.0
            columns["resistors"].append(off * response)
        shared = np.sum(own, axis=0) if own else np.zeros(sensitivity.coefficient.shape[::2])
        if stage.kind == "integrator":
            farads = tolerance_of(real.capacitor, target.capacitor_piles, target.capacitor_tolerance)
            columns["capacitors"].append(farads / sqrt(3) * shared)
        else:
            columns["resistors"].append(sigma(real.feedback) * shared)
        if sized.start is not None and sized.start[0] and real.start is not None:
            start = sensitivity.start[stage.name] * sized.start_volts / sizing.scales[stage.node].volts_per_unit
            columns["resistors"].append(hypot(*map(sigma, real.start)) * start)
    return columns
