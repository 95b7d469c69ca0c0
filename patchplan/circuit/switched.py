"""Steps and pulses that the board makes itself: two switches, one from a reference and one from ground."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

from patchplan.equation.system import level_of
from patchplan.errors import CannotBuild
from patchplan.patch.records import Patch, Stage, Wire
from patchplan.sizing.records import Leg, NodeScale, Sizing, StageSizing, Target
from patchplan.sizing.stock import left_over, matched_pair

#: Resistors of the inverter that makes the second polarity of the reference [ohm].
_INVERTER_OHM = 10e3
#: A step stands for the reference where it agrees with it to this fraction.
_SAME = 1e-6


def switched_volts(patch: Patch, sizing: Sizing, target: Target, duration: float) -> dict[str, float]:
    """Volts while on, by name of each source stage that is a switch from the reference.

    A step whose terminal asks for other volts than those of the reference comes from outside.
    """
    found = {}
    for stage in patch.stages:
        if stage.kind == "source":
            level = level_of(patch.sources[stage.signal], duration)
            volts = stage.sign * sizing.scales[stage.node].volts_per_unit * level
            if math.isclose(abs(volts), target.reference, rel_tol=_SAME):
                found[stage.name] = volts
    return found


def with_references(patch: Patch, sizing: Sizing, target: Target, duration: float) -> tuple[Patch, Sizing]:
    """Patch and Sizing with the reference, and the inverter on it, that switched sources need and nobody else has.

    Parameters
    ----------
    duration
        Run [problem time].
    """
    volts = switched_volts(patch, sizing, target, duration)
    if not volts:
        return patch, sizing
    stages, scales = list(patch.stages), dict(sizing.scales)
    values, signs = dict(sizing.stages), patch.sign_stages
    first = next((s for s in stages if s.kind == "reference"), None)
    if first is None:
        first = Stage("REF", "reference", _unused("ref", patch), "1", 1)
        stages.insert(0, first)
        scales[first.node] = NodeScale(first.node, target.reference, target.reference, -target.op_amp.low)
    wanted = {1 if v > 0 else -1 for v in volts.values()}
    if wanted - {first.sign, *(s.sign for s in _inverters(patch, first))}:
        node = _unused(f"{first.node}_n", patch)
        taken = {s.name for s in stages}
        name = next(n for n in (f"N{i}" for i in range(1, len(stages) + 2)) if n not in taken)
        stages.append(Stage(name, "inverter", node, "1", -first.sign, (Wire(first.node, Fraction(1)),)))
        leg, feedback = _pair(patch, sizing, target)
        values[name] = StageSizing(name, (Leg((leg,)),), feedback=feedback)
        scales[node] = replace(scales[first.node], node=node)
        signs += 1
    return replace(patch, stages=tuple(stages), sign_stages=signs), replace(sizing, scales=scales, stages=values)


def _pair(patch: Patch, sizing: Sizing, target: Target) -> tuple[float, float]:
    """Two equal resistors, or as equal as what is on hand."""
    if target.resistor_piles is None:
        ohm = min(target.resistors, key=lambda r: abs(math.log(r / _INVERTER_OHM)))
        return ohm, ohm
    pair = matched_pair(left_over(patch, sizing, target), _INVERTER_OHM)
    if pair is None:
        raise CannotBuild("The stock has no two resistors left for the second polarity of the reference. Add two.")
    return pair


def _inverters(patch: Patch, reference: Stage) -> list[Stage]:
    return [s for s in patch.stages if s.kind == "inverter" and s.wires[0].source == reference.node]


def _unused(wish: str, patch: Patch) -> str:
    taken = {s.node for s in patch.stages}
    return next(n for n in (wish, *(f"{wish}_{i}" for i in range(2, len(taken) + 3))) if n not in taken)
