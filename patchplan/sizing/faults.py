"""What the parts cannot do, and what would mend it, a sentence each."""

from __future__ import annotations

from math import ceil, floor, log10

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.records import Patch, Stage
from patchplan.quantity import engineering
from patchplan.sizing.loads import heavy_loads
from patchplan.sizing.model import Model, Ratio
from patchplan.sizing.networks import largest_transfer
from patchplan.sizing.records import Target
from patchplan.sizing.speed import Speed
from patchplan.sizing.values import Values, wanted_products

Array = NDArray[np.float64]
#: A coefficient further off than this was not in reach of the parts.
OUT_OF_REACH = 0.1
_MORE = {
    False: "Wider resistor_limits or capacitor_limits, a finer series",
    True: "More parts or other values in the stock, wider resistor_limits or capacitor_limits,",
}


def find_faults(
    pace: Speed, given: float | None, unit: float, model: Model, values: Values, patch: Patch, target: Target
) -> tuple[str, ...]:
    """Sentences on why the plan cannot be built; none where every value is within :data:`OUT_OF_REACH`.

    Parameters
    ----------
    given
        Time scale asked for, None where it is free.
    unit
        Seconds per unit of problem time.
    """
    low, high = pace.window
    faults = list(values.missing)
    if not faults and given is None and low > high:
        faults.append(
            f"No speed serves every stage: {pace.limits[0]} asks for at least {engineering(low, 's')} per unit of "
            f"time, {pace.limits[1]} for at most {engineering(high, 's')}. Faster parts or wider value limits would "
            f"mend it."
        )
    if not faults:
        faults += heavy_loads(patch, target)
    off = [(abs(e), r) for e, r in zip(values.errors.tolist(), model.ratios, strict=True) if abs(e) > OUT_OF_REACH]
    if not off or faults:
        return tuple(faults)
    if given is not None and not pace.hard[0].time_scale <= given <= pace.hard[1].time_scale:
        return (_beyond_hard(pace, given, unit),)
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
        f"{100 * worst:.0f} % off at {_place(stages[ratio.stage], ratio)}. {_MORE[target.stocked]} or --think high "
        f"would mend it.",
    )


def _beyond_hard(pace: Speed, given: float, unit: float) -> str:
    """That no values reach a speed, and what else is in its way."""
    fast = given < pace.hard[0].time_scale
    hard, limit, end = pace.hard[not fast], pace.limits[not fast], pace.window[not fast]
    side, least = ("fast", "less") if fast else ("slow", "more")
    nearer = (
        "" if limit == hard.text
        else f" The window ends at {engineering(end, 's')} already ({limit}), where errors begin to grow."
    )  # fmt: skip
    other = " and faster op amps or multipliers" if limit.startswith(("bandwidth", "slew")) else ""
    return (
        f"The speed asked for is too {side}: one unit of time would take {engineering(given, 's')} on the board, and "
        f"no {least} than {engineering(hard.time_scale, 's')} can be built ({hard.text}).{nearer} The nearest inside "
        f"the window is speed = {nearest_speed(pace, given, unit)} under [build]; wider value limits{other} may mend "
        f"it, too."
    )


def outside_note(pace: Speed, given: float | None, unit: float) -> str:
    """What a speed outside the window runs into; parameters as for :func:`find_faults`."""
    low, high = pace.window
    if given is None or low <= given <= high:
        return ""
    fast = given < low
    side, than = ("fast", "less") if fast else ("slow", "more")
    return (
        f"Runs outside the window: a unit of time takes {engineering(given, 's')} on the board, {than} than its {side} "
        f"end of {engineering(pace.window[not fast], 's')} ({pace.limits[not fast]}); {pace.cost}. The nearest inside "
        f"is speed = {nearest_speed(pace, given, unit)} under [build]."
    )


def nearest_speed(pace: Speed, given: float, unit: float) -> str:
    """The speed at the window's near end, rounded to three digits into the window."""
    slow = given > pace.window[1]
    speed = unit / (pace.window[1] if slow else pace.window[0])
    step = 10.0 ** (floor(log10(speed)) - 2)
    return f"{step * (ceil(speed / step) if slow else floor(speed / step)):.6g}"


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
