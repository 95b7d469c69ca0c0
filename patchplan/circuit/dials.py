"""The dials of a board: which potentiometer and end resistors each knob's stage gets, and the law of its travel."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.circuit.knobs import TRACK_TOLERANCE, Crossing, Dial, crossing, rheostat
from patchplan.circuit.records import KnobLaw
from patchplan.equation.problem import Parameter
from patchplan.equation.system import Knob
from patchplan.equation.tree import Name
from patchplan.equation.waveform import numeric_names
from patchplan.patch.records import Patch, Stage
from patchplan.sizing.records import Sizing, Target
from patchplan.sizing.stock import counts, left_over, without

Array = NDArray[np.float64]
#: Marks of a dial, from end to end.
MARKS = tuple(i / 10 for i in range(11))
#: A law that strays less than this from a straight line, as a share of the range, counts as linear.
STRAIGHT = 0.005


@dataclass(frozen=True, slots=True)
class Fitted:
    """A dial with its law; the law's ``ref`` is still to be filled in."""

    dial: Dial
    law: KnobLaw


def find_dials(patch: Patch, sizing: Sizing, target: Target, parameters: Sequence[Parameter] = ()) -> dict[str, Fitted]:
    """Dial of every stage with a knob, by stage name.

    Sections of one knob turn together and are made alike; parts on hand are counted.

    Parameters
    ----------
    parameters
        Those of the problem, for the law in terms of the parameter.

    Raises
    ------
    CannotBuild
        Where a knob is out of the parts' reach.
    """
    ends = {p.name: (float(p.low), float(p.high)) for p in parameters if p.low is not None and p.high is not None}
    found: dict[str, Fitted] = {}
    made: dict[tuple[str | None, bool, str], Fitted] = {}
    left = left_over(patch, sizing, target)
    knobbed = [s for s in patch.stages if s.knob]
    for stage in knobbed:
        section = (stage.knob, stage.bipolar, stage.name if stage.bipolar else "")
        if section not in made:
            alike = sum((s.knob, s.bipolar) == (stage.knob, stage.bipolar) for s in knobbed) if not stage.bipolar else 1
            have = counts(left.resistors, left.resistor_piles)
            values = tuple(v for v in left.resistors if have[v] >= alike)
            fit = _crossing if stage.bipolar else _rheostat
            dial, travel, short = fit(stage, patch, sizing, values, target.resistor_tolerance)
            made[section] = Fitted(dial, _law(stage, patch.knobs[stage.knob or ""], dial, travel, short, ends))
            left = without(left, Counter(made[section].dial.fixed_resistors * alike))
        found[stage.name] = made[section]
    return found


def _rheostat(
    stage: Stage, patch: Patch, sizing: Sizing, resistors: tuple[float, ...], tolerance: float
) -> tuple[Dial, Array, Array]:
    """The dial, and the knob at its marks with a nominal track and a short one."""
    knob = patch.knobs[stage.knob or ""]
    per_unit = sizing.stages[stage.name].feedback / float(knob.size)
    dial = rheostat(per_unit, float(knob.value), (float(knob.low), float(knob.high)), resistors, tolerance)
    sign = -1.0 if knob.low < 0 else 1.0
    marks, short = np.array(MARKS), dial.track * (1 - TRACK_TOLERANCE)
    return dial, sign * dial.ohms(marks) / per_unit, sign * dial.ohms(marks, short) / per_unit


def _crossing(
    stage: Stage, patch: Patch, sizing: Sizing, resistors: tuple[float, ...], tolerance: float
) -> tuple[Dial, Array, Array]:
    """The dial, and the knob at its marks with a nominal track and a short one."""
    knob, nodes = patch.knobs[stage.knob or ""], patch.by_node()
    volts = {n: nodes[n].sign * sizing.scales[n].volts_per_unit for n in (stage.node, *(w.source for w in stage.wires))}
    first, second = (w.source for w in stage.wires)
    per_unit = volts[stage.node] * float(stage.wires[0].coefficient) / volts[first]
    sized = sizing.stages[stage.name]
    made = Crossing(-volts[second] / volts[first], sized.legs[0], sized.feedback)
    low, high = sorted((per_unit * float(knob.low), per_unit * float(knob.high)))
    dial = crossing(stage, (per_unit * float(knob.value), low, high), made, resistors, tolerance)
    tracks = (dial.track, dial.track * (1 - TRACK_TOLERANCE))
    values, short = (made.gain(np.array(MARKS), track, dial.end_a, dial.end_b) / per_unit for track in tracks)
    return dial, values, short


def _law(
    stage: Stage, knob: Knob, dial: Dial, values: Array, short: Array, ends: Mapping[str, tuple[float, float]]
) -> KnobLaw:
    """The law of a dial from the knob at its marks; ``short`` is with a track at the low end of its tolerance."""
    straight = np.linspace(values[0], values[-1], len(values))
    bend = float(np.abs(values - straight).max() / max(abs(values[-1] - values[0]), 1e-300))
    parameter = knob.parameters[0] if len(knob.parameters) == 1 else ""
    given = (
        values
        if isinstance(knob.tree, Name)
        else _parameter_at(knob, values, ends[parameter])
        if parameter in ends
        else None
    )
    points = tuple(
        (mark, float(value), None if given is None or not np.isfinite(given[i]) else float(given[i]))
        for i, (mark, value) in enumerate(zip(MARKS, values.tolist(), strict=True))
    )
    return KnobLaw(
        knob.name, parameter, "", stage.name, (float(knob.low), float(knob.high)),
        (float(values[0]), float(values[-1])), (float(short[0]), float(short[-1])), dial.setting, points, bend,
    )  # fmt: skip


def _parameter_at(knob: Knob, values: Array, ends: tuple[float, float]) -> Array:
    """Parameter at which a function of one parameter takes values; nan outside its range, or where it turns back."""
    grid = np.linspace(*ends, 513)
    along = np.asarray(numeric_names(knob.tree, {knob.parameters[0]: grid}))
    if not (np.diff(along) > 0).all():
        grid, along = grid[::-1], along[::-1]
    if not (np.diff(along) > 0).all():
        return np.full(len(values), np.nan)
    return np.interp(values, along, grid, left=np.nan, right=np.nan)
