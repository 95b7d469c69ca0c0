"""What the parts cannot do, and what would mend it, a sentence each."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.records import Patch, Stage
from patchplan.quantity import engineering
from patchplan.sizing.model import Model, Ratio
from patchplan.sizing.networks import largest_transfer
from patchplan.sizing.records import Target
from patchplan.sizing.speed import Speed
from patchplan.sizing.values import Values, wanted_products

Array = NDArray[np.float64]
#: A coefficient further off than this was not in reach of the parts.
OUT_OF_REACH = 0.1


def find_faults(
    pace: Speed, given: float | None, model: Model, values: Values, patch: Patch, target: Target
) -> tuple[str, ...]:
    """Sentences on why the plan cannot be built; none where every value is within :data:`OUT_OF_REACH`."""
    low, high = pace.window
    faults = []
    if given is None and low > high:
        faults.append(
            f"No speed serves every stage: {pace.limits[0]} asks for at least {engineering(low, 's')} per unit of "
            f"time, {pace.limits[1]} for at most {engineering(high, 's')}. Faster parts or wider value limits would "
            f"mend it."
        )
    off = [(abs(e), r) for e, r in zip(values.errors.tolist(), model.ratios, strict=True) if abs(e) > OUT_OF_REACH]
    if not off or faults:
        return tuple(faults)
    if given is not None and not low <= given <= high:
        side, limit, end = ("fast", pace.limits[0], low) if given < low else ("slow", pace.limits[1], high)
        return (
            f"The speed asked for is too {side}: one unit of time would take {engineering(given, 's')} on the board, "
            f"and {limit} allows {'no less' if side == 'fast' else 'no more'} than {engineering(end, 's')}. Another "
            f"speed under [build] or wider value limits would mend it.",
        )
    stages = {s.name: s for s in patch.stages}
    beyond = _beyond(model, values, target)
    sentences = [
        _unreachable(stages[r.stage], r, beyond[r.stage, r.wire]) for _, r in off if (r.stage, r.wire) in beyond
    ]
    if sentences:
        return tuple(sentences)
    worst, ratio = max(off, key=lambda pair: pair[0])
    return (
        f"The search found no values for {len(off)} of {len(model.ratios)} coefficients, the worst of them "
        f"{100 * worst:.0f} % off at {_place(stages[ratio.stage], ratio)}. Wider resistor_limits or capacitor_limits, "
        f"a finer series or --think high would mend it.",
    )


def _beyond(model: Model, values: Values, target: Target) -> dict[tuple[str, int], str]:
    """(stage, wire) -> what it asks for, where no value of the limits reaches it."""
    longest = largest_transfer(target.resistors) * target.capacitors[-1]
    shortest = target.resistors[0] * target.capacitors[0]
    found: dict[tuple[str, int], str] = {}
    wanted = wanted_products(model, values.theta)
    by_stage: dict[str, list[float]] = {}
    for ratio, product in zip(model.ratios, wanted.tolist(), strict=True):
        if ratio.kind == "integrator":
            by_stage.setdefault(ratio.stage, []).append(product)
            if not shortest <= product <= longest:
                found[ratio.stage, ratio.wire] = f"R times C of {engineering(product, 's')}"
        elif ratio.kind == "start" and not 1 / _span(target) <= product <= _span(target):
            found[ratio.stage, ratio.wire] = f"{product:.3g} of the reference"
    for ratio, product in zip(model.ratios, wanted.tolist(), strict=True):
        widest = max(by_stage.get(ratio.stage, [0.0]))
        if ratio.kind == "integrator" and widest * target.resistors[0] > largest_transfer(target.resistors) * product:
            found.setdefault((ratio.stage, ratio.wire), f"a gain {widest / product:.3g} times its smallest one")
    return found


def _span(target: Target) -> float:
    return target.resistors[-1] / target.resistors[0]


def _place(stage: Stage, ratio: Ratio) -> str:
    if ratio.kind == "start":
        return f"the start value of {stage.signal}"
    return f"the input {stage.wires[ratio.wire].source} of {stage.name}"


def _unreachable(stage: Stage, ratio: Ratio, asked: str) -> str:
    return (
        f"No purchasable value reaches {_place(stage, ratio)}: it asks for {asked}. Wider resistor_limits or "
        f"capacitor_limits, or another speed, would mend it."
    )
