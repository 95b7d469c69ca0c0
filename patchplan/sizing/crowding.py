"""Inputs of integrators that a summer in front would bring within what resistors span."""

from __future__ import annotations

from collections.abc import Iterator
from math import sqrt

from patchplan.patch.records import Patch, Stage
from patchplan.sizing.faults import OUT_OF_REACH
from patchplan.sizing.model import MOST_USE
from patchplan.sizing.records import Sizing, Target

#: A summer that lifts its input by less than this is no help.
LEAST_LIFT = 1.5


def crowding(patch: Patch, sizing: Sizing, target: Target) -> tuple[str, ...]:
    """Inputs that ask for the largest gains of an integrator with a value out of reach, as ``x<-x*y``.

    A summer lifts a node that swings over a small part of its limit, such as a product whose factors peak at different
    times, so that the integrator's gains lie closer together. Where an integrator's gains differ by more than single
    resistors do, the wires above the geometric mean of its largest and smallest gain are taken, if there is room to
    lift them.
    """
    off = {c.at for c in sizing.coefficients if c.wanted and abs(c.realised / c.wanted - 1) > OUT_OF_REACH}
    found: list[str] = []
    for stage in patch.stages:
        if stage.kind == "integrator" and any(f"{stage.node}<-{w.source}" in off for w in stage.wires):
            found += _crowded(stage, patch, sizing, target.resistors[-1] / target.resistors[0])
    return tuple(dict.fromkeys(found))


def _crowded(stage: Stage, patch: Patch, sizing: Sizing, span: float) -> Iterator[str]:
    scales, by_node = sizing.scales, patch.by_node()
    gains = [abs(float(w.coefficient)) / scales[w.source].volts_per_unit for w in stage.wires]
    if max(gains) <= span * min(gains):
        return
    middle = sqrt(max(gains) * min(gains))
    for wire, gain in zip(stage.wires, gains, strict=True):
        scale, source = scales[wire.source], by_node[wire.source]
        lift = MOST_USE * scale.limit_volts / scale.peak_volts if scale.peak_volts else 0.0
        if gain > middle and lift > LEAST_LIFT and not source.signal.startswith(("part of ", "front of ")):
            yield f"{stage.signal}<-{source.signal}"
