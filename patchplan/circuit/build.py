"""From Patch and Sizing to parts on nets."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.circuit.catalogue import Catalogue
from patchplan.circuit.dials import find_dials
from patchplan.circuit.ledger import Ledger
from patchplan.circuit.packages import assign_places, decoupling
from patchplan.circuit.records import Circuit, NodeMap, Part
from patchplan.circuit.stages import REFERENCE_AMPERE, Board, add_stage
from patchplan.circuit.switched import switched_volts
from patchplan.circuit.target import check_multiplier, reference_for, switch_for
from patchplan.circuit.trimmers import find_trims
from patchplan.circuit.wiring import spare_switches, wiring_of, with_pins
from patchplan.equation.problem import Build, Recording
from patchplan.equation.system import Source
from patchplan.equation.waveform import Waveform
from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.sizing.records import Sizing, Target

Array = NDArray[np.float64]


def build_circuit(
    form: Form,
    patch: Patch,
    sizing: Sizing,
    target: Target,
    build: Build,
    catalogue: Catalogue,
    *,
    stand_ins: Mapping[str, tuple[Array, Array]] | None = None,
) -> Circuit:
    """Lay out the board.

    An integrator's legs meet at a bus; the operate switch joins the bus to the summing node, the hold switch joins the
    summing node to the start network. In hold the inputs are off the summing node: they would pull the start value.

    Parameters
    ----------
    patch, sizing
        With the references that switched sources need, see :func:`patchplan.circuit.switched.with_references`.
    stand_ins
        Waveforms (times, values) [problem units] for sources known only by their bounds.

    Raises
    ------
    CannotBuild
        Where the supply or a knob is out of the parts' reach.
    """
    if patch.counts().get("multiplier"):
        check_multiplier(build, catalogue)
    board = _empty_board(form, patch, sizing, target, build, catalogue)
    for stage in patch.stages:
        add_stage(board, stage)
    for part in decoupling(board.places, [p.ref for p in board.parts if p.kind == "reference"]):
        board.put(part)
    parts = with_pins(board.parts, catalogue)
    return Circuit(
        parts=parts,
        nodes=_node_maps(form, patch, sizing),
        watched=dict(patch.watched),
        op_amp=target.op_amp,
        multiplier=target.multiplier,
        supply=build.supply,
        time_scale=sizing.time_scale,
        duration=float(form.system.duration) * sizing.time_scale,
        run=build.run,
        sources={name: _with_waveform(source, stand_ins or {}) for name, source in patch.sources.items()},
        notes=(*board.notes, *board.places.notes, *spare_switches(parts, catalogue), *_load_notes(board, catalogue)),
        start={} if board.held else _start_volts(patch, sizing),
        wiring=wiring_of(parts, catalogue),
        knobs=tuple(board.knobs),
    )


def _empty_board(form: Form, patch: Patch, sizing: Sizing, target: Target, build: Build, catalogue: Catalogue) -> Board:
    """Places, stock and dials, before anything is laid down."""
    held = build.run != "free"
    switched = switched_volts(patch, sizing, target, float(form.system.duration))
    switch = switch_for(build, catalogue) if held or switched else None
    toggled = [s for s in patch.stages if held and s.kind == "integrator"]
    toggled += [s for s in patch.stages if s.name in switched]
    places = assign_places(
        patch, catalogue.op_amps[target.op_amp.name], catalogue.multipliers[target.multiplier.name], switch, toggled
    )
    return Board(
        patch, sizing, target, places, switch, reference_for(build, catalogue), held, switched,
        ledger=Ledger.of(target), dials=find_dials(patch, sizing, target, form.system.adjustable),
        trims=find_trims(patch, sizing, target) if sizing.trimming and sizing.trimming.fitted else {},
    )  # fmt: skip


def replace_part(circuit: Circuit, ref: str, **changes: Any) -> Circuit:
    """The circuit with some fields of one part changed.

    Raises
    ------
    KeyError
        Where no part has this designator.
    """
    if all(p.ref != ref for p in circuit.parts):
        raise KeyError(ref)
    return replace(circuit, parts=tuple(replace(p, **changes) if p.ref == ref else p for p in circuit.parts))


def _node_maps(form: Form, patch: Patch, sizing: Sizing) -> dict[str, NodeMap]:
    maps = {}
    for stage in patch.stages:
        scale = sizing.scales[stage.node]
        shift = float(form.offsets.get(stage.signal, 0))
        offset = -stage.sign * scale.volts_per_unit * shift if shift else 0.0
        maps[stage.node] = NodeMap(
            stage.node, stage.signal, stage.sign, scale.volts_per_unit, offset, scale.limit_volts, stage.kind
        )
    return maps


def _start_volts(patch: Patch, sizing: Sizing) -> dict[str, float]:
    return {
        s.node: s.sign * sizing.scales[s.node].volts_per_unit * float(s.start)
        for s in patch.stages
        if s.kind == "integrator"
    }


def _with_waveform(source: Source, stand_ins: Mapping[str, tuple[Array, Array]]) -> Source:
    if source.waveform is not None or source.name not in stand_ins:
        return source
    times, values = (tuple(float(v) for v in column) for column in stand_ins[source.name])
    return replace(source, waveform=Waveform(recording=Recording(f"stand-in for {source.name}", times, values)))


def _load_notes(board: Board, catalogue: Catalogue) -> list[str]:
    """One sentence for each output that drives less than the load its part is rated for."""
    target = board.target
    ampere = board.reference.si("current") if board.reference else REFERENCE_AMPERE
    rated = {
        "op amp": (target.op_amp.name, target.op_amp.load),
        "multiplier": (target.multiplier.name, catalogue.multipliers[target.multiplier.name].si("load")),
        "reference": ("a reference", target.reference / ampere),
    }
    loads = output_loads(board.parts)
    notes = []
    for part in board.parts:
        if part.kind in rated:
            name, least = rated[part.kind]
            load = loads.get(part.nets[-1], float("inf"))
            if load < least * (1 - 1e-9):
                notes.append(
                    f"Node {part.nets[-1]} drives {load:.3g} ohm; {name} is rated for {least:.3g} ohm, so its swing "
                    "may be less than planned. Larger resistors would mend it."
                )
    return notes


def output_loads(parts: Sequence[Part]) -> dict[str, float]:
    """Summed load of every net [ohm], in hold or operate, whichever is heavier; nets without load are left out.

    Every branch is taken as if its far end were at ground, which is exact for virtual grounds and safe for the rest.
    """
    operate, hold = _conductances(parts, "operate"), _conductances(parts, "hold")
    return {net: 1 / max(operate.get(net, 0.0), hold.get(net, 0.0)) for net in (operate | hold)}


def _conductances(parts: Sequence[Part], closed: str) -> dict[str, float]:
    summing = {p.nets[1] for p in parts if p.kind == "op amp"}
    # Behind an open switch no current flows; a step that is on loads its reference.
    off = {n for p in parts if p.kind == "switch" and not p.control and p.closed != closed for n in p.nets} - summing
    stepped = {p.nets[1]: p.nets[0] for p in parts if p.closed == "high"}
    behind = {p.nets[0]: p.value * p.total for p in parts if p.kind == "potentiometer" and p.nets[1] == p.nets[2]}
    sums: dict[str, float] = {}
    for part in parts:
        if part.kind == "resistor" and off.isdisjoint(part.nets):
            for here, far in (part.nets, part.nets[::-1]):
                for net in (here, stepped.get(here)):
                    if net is not None:
                        sums[net] = sums.get(net, 0.0) + 1 / (part.value + behind.get(far, 0.0))
        elif part.kind == "potentiometer":
            # A rheostat counts at its setting, at 0 in full, since it carries its leg's current whatever the setting; a
            # track across two outputs has twice the volts.
            ohm = (part.value or 1.0) * part.total if part.nets[1] == part.nets[2] else part.total / 2
            for net in dict.fromkeys((part.nets[0], part.nets[2])):
                sums[net] = sums.get(net, 0.0) + 1 / max(ohm, 1e-3)
    return sums
