"""Each kind of stage as parts on nets."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property

from patchplan.circuit.catalogue import PartData
from patchplan.circuit.dials import STRAIGHT, Fitted
from patchplan.circuit.knobs import TRACK_TOLERANCE, Dial
from patchplan.circuit.ledger import Ledger
from patchplan.circuit.packages import Place, Places
from patchplan.circuit.records import DC_LIMIT, GROUND, KnobLaw, Part
from patchplan.circuit.trimmers import TRIMMER, Trim
from patchplan.patch.records import Patch, Stage
from patchplan.sizing.records import Leg, Sizing, StageSizing, Target

DIELECTRIC = "C0G or film"
#: What a voltage reference gives before it sags [A] (common practice, no source).
REFERENCE_AMPERE = 10e-3
_LETTERS = {
    "resistor": "R", "potentiometer": "RV", "capacitor": "C", "decoupling": "C", "switch": "SW",
    "reference": "REF", "source": "SRC",
}  # fmt: skip


@dataclass(frozen=True)
class Board:
    """What every stage needs to know, and the parts and notes laid down so far.

    Attributes
    ----------
    reference
        None where the catalogue has none of these volts.
    held
        Whether the run has a hold.
    switched
        Volts while on of the source stages that are switches from the reference, by name.
    """

    patch: Patch
    sizing: Sizing
    target: Target
    places: Places
    switch: PartData | None
    reference: PartData | None
    held: bool
    switched: Mapping[str, float]
    parts: list[Part] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    ledger: Ledger = field(default_factory=Ledger)
    dials: Mapping[str, Fitted] = field(default_factory=dict)
    knobs: list[KnobLaw] = field(default_factory=list)
    trims: Mapping[tuple[str, int], Trim] = field(default_factory=dict)
    numbers: Counter[str] = field(default_factory=Counter)

    @cached_property
    def by_node(self) -> dict[str, Stage]:
        """Stages by the node they drive."""
        return self.patch.by_node()

    @cached_property
    def references(self) -> tuple[Stage, ...]:
        """The reference and the inverters on it."""
        first = next((s for s in self.patch.stages if s.kind == "reference"), None)
        inverted = (s for s in self.patch.stages if first and s.kind == "inverter" and s.wires[0].source == first.node)
        return (first, *inverted) if first else ()

    def put(self, part: Part) -> None:
        """Lay down a part; passive ones get the next designator of their letter."""
        letter = _LETTERS.get(part.kind)
        if letter is not None:
            self.numbers[letter] += 1
            part = replace(part, ref=f"{letter}{self.numbers[letter]}")
        self.parts.append(part)

    def resistor(self, stage: Stage, a: str, b: str, value: float, model: str = "") -> None:
        """Lay down a resistor."""
        self.passive(stage, "resistor", (a, b), value, model)

    def passive(self, stage: Stage, kind: str, nets: tuple[str, str], value: float, model: str) -> None:
        """Lay down a resistor or capacitor, from the stock where there is one."""
        pile = self.ledger.take(kind, value)
        if pile is None:
            usual = self.target.resistor_tolerance if kind == "resistor" else self.target.capacitor_tolerance
            self.put(Part("", kind, nets, value, usual, stage.name, model=model))
            return
        marked = pile.marked if pile.marked != pile.value else 0.0
        part = Part("", kind, nets, value, pile.tolerance, stage.name, model=model, serial=pile.serial, marked=marked)
        self.put(part)

    def volts(self, node: str) -> float:
        """Signed volts per unit of the signal at a node."""
        return self.by_node[node].sign * self.sizing.scales[node].volts_per_unit


def add_stage(board: Board, stage: Stage) -> None:
    """Lay down one stage of the patch."""
    makers: dict[str, Callable[[Board, Stage], None]] = {
        "reference": _reference,
        "source": _source,
        "integrator": _integrator,
        "summer": _summer,
        "inverter": _summer,
        "multiplier": _multiplier,
    }
    makers[stage.kind](board, stage)


def _reference(board: Board, stage: Stage) -> None:
    target, model = board.target, board.reference.name if board.reference else ""
    volts = stage.sign * target.reference
    board.put(Part("", "reference", (stage.node,), volts, target.reference_tolerance, stage.name, model=model))
    if board.reference is None:
        board.notes.append(
            f"No reference of the catalogue gives {target.reference:g} V on this supply. "
            f"{board.parts[-1].ref} may be any that gives {1e3 * REFERENCE_AMPERE:g} mA."
        )
    elif board.reference.si("tolerance") > target.reference_tolerance * (1 + 1e-9):
        board.notes.append(
            f"{model} is good for {100 * board.reference.si('tolerance'):g} %, {board.parts[-1].ref} is to hold "
            f"{100 * target.reference_tolerance:g} %. Trim it, or take a closer grade."
        )


def _source(board: Board, stage: Stage) -> None:
    if stage.name not in board.switched:
        board.put(Part("", "source", (stage.node,), board.volts(stage.node), 0.0, stage.name, model=stage.signal))
        return
    reference = _reference_node(board, board.switched[stage.name])
    _switch(board, stage, (reference, stage.node), "high", board.places.operate[stage.name], stage.signal)
    _switch(board, stage, (stage.node, GROUND), "low", board.places.hold[stage.name], stage.signal)
    on, off = board.parts[-2].ref, board.parts[-1].ref
    board.notes.append(
        f"Source {stage.node} is made on the board: {on} joins it to {reference} while its control line is high, "
        f"{off} to ground while it is low."
    )


def _op_amp(board: Board, stage: Stage) -> None:
    place = board.places.active[stage.name]
    name = board.target.op_amp.name
    nets = (GROUND, f"{stage.node}_inv", stage.node)
    ref = place.package + place.section
    board.put(Part(ref, "op amp", nets, stage=stage.name, package=place.package, section=place.section, model=name))


def _legs(board: Board, stage: Stage, legs: tuple[Leg, ...], into: str) -> None:
    for index, (wire, leg) in enumerate(zip(stage.wires, legs, strict=True), 1):
        trim = board.trims.get((stage.name, index - 1))
        if trim is None:
            _leg(board, stage, wire.source, leg, into, index)
        else:
            _trimmed(board, stage, wire.source, into, trim, f"{stage.node}_tr{index}")


def _leg(board: Board, stage: Stage, source: str, leg: Leg, into: str, index: int) -> None:
    middle = f"{stage.node}_t{index}"
    if leg.join == "series":
        board.resistor(stage, source, middle, leg.resistors[0])
        board.resistor(stage, middle, into, leg.resistors[1])
        return
    if not leg.is_network:
        for value in leg.resistors:
            board.resistor(stage, source, into, value)
        return
    for a, b, value in zip((source, middle, middle), (middle, GROUND, into), leg.resistors, strict=True):
        board.resistor(stage, a, b, value)


def _trimmed(board: Board, stage: Stage, source: str, into: str, trim: Trim, middle: str) -> None:
    """A fixed resistor and a trimmer in series; the unused end of its track is tied to the wiper."""
    if trim.fixed:
        board.resistor(stage, source, middle, trim.fixed)
    nets = (middle if trim.fixed else source, into, into)
    board.put(
        Part("", "potentiometer", nets, trim.setting, TRACK_TOLERANCE, stage.name, model=TRIMMER, total=trim.track)
    )


def _integrator(board: Board, stage: Stage) -> None:
    sized = board.sizing.stages[stage.name]
    inverting = f"{stage.node}_inv"
    held = sized.start is not None and board.held
    _legs(board, stage, sized.legs, f"{stage.node}_bus" if held else inverting)
    if held:
        _switch(board, stage, (f"{stage.node}_bus", inverting), "operate", board.places.operate[stage.name])
    _op_amp(board, stage)
    board.passive(stage, "capacitor", (inverting, stage.node), sized.capacitor, DIELECTRIC)
    if sized.feedback:
        board.resistor(stage, inverting, stage.node, sized.feedback, DC_LIMIT)
    if held:
        _start_network(board, stage, sized)


def _start_network(board: Board, stage: Stage, sized: StageSizing) -> None:
    assert sized.start is not None
    from_reference, from_output = sized.start
    middle = f"{stage.node}_ic"
    _switch(board, stage, (f"{stage.node}_inv", middle), "hold", board.places.hold[stage.name])
    trim, reference = (
        board.trims.get((stage.name, -1)),
        _reference_node(board, -sized.start_volts) if from_reference else "",
    )
    if trim is not None:
        _trimmed(board, stage, reference, middle, trim, f"{stage.node}_tri")
    elif from_reference:
        board.resistor(stage, reference, middle, from_reference)
    board.resistor(stage, stage.node, middle, from_output)


def _reference_node(board: Board, polarity: float) -> str:
    """Node that carries the reference with the sign of ``polarity``."""
    for stage in board.references:
        if stage.sign * polarity > 0:
            return stage.node
    raise ValueError(f"The patch has no {'positive' if polarity > 0 else 'negative'} reference.")


def _switch(board: Board, stage: Stage, nets: tuple[str, str], closed: str, place: Place, control: str = "") -> None:
    assert board.switch is not None
    ohm = board.switch.si("on_resistance")
    board.put(
        Part(
            "", "switch", nets, ohm, 0.0, stage.name, place.package, place.section, board.switch.name,
            closed=closed, control=control,
        )
    )  # fmt: skip


def _summer(board: Board, stage: Stage) -> None:
    sized = board.sizing.stages[stage.name]
    inverting = f"{stage.node}_inv"
    if stage.bipolar:
        _crossing_leg(board, stage, sized, inverting)
    else:
        _legs(board, stage, sized.legs, inverting)
    _op_amp(board, stage)
    if stage.knob is None or stage.bipolar:
        board.resistor(stage, inverting, stage.node, sized.feedback)
    else:
        _rheostat_feedback(board, stage, inverting)


def _rheostat_feedback(board: Board, stage: Stage, inverting: str) -> None:
    dial = board.dials[stage.name].dial
    start = stage.node
    if dial.fixed:
        start = f"{stage.node}_w"
        board.resistor(stage, stage.node, start, dial.fixed)
    # The unused end is tied to the wiper, so that a lost wiper leaves the whole track in the loop.
    _potentiometer(board, stage, (start, inverting, inverting), dial)
    if dial.parallel:
        board.resistor(stage, start, inverting, dial.parallel)


def _crossing_leg(board: Board, stage: Stage, sized: StageSizing, inverting: str) -> None:
    dial = board.dials[stage.name].dial
    ends = []
    for wire, ohm, name in zip(stage.wires, (dial.end_a, dial.end_b), ("wa", "wb"), strict=True):
        ends.append(f"{stage.node}_{name}" if ohm else wire.source)
        if ohm:
            board.resistor(stage, wire.source, ends[-1], ohm)
    _potentiometer(board, stage, (ends[0], f"{stage.node}_w", ends[1]), dial)
    _leg(board, stage, f"{stage.node}_w", sized.legs[0], inverting, 1)


def _potentiometer(board: Board, stage: Stage, nets: tuple[str, str, str], dial: Dial) -> None:
    board.put(Part("", "potentiometer", nets, dial.setting, TRACK_TOLERANCE, stage.name, total=dial.track))
    law = replace(board.dials[stage.name].law, ref=board.parts[-1].ref)
    board.knobs.append(law)
    low, high = sorted(law.covers)
    least = sorted(law.covers_least)
    shape = "linear" if law.bend < STRAIGHT else f"{100 * law.bend:.0f} % off a straight line at most"
    board.notes.append(
        f"{law.ref} sets {law.knob}, {law.wanted[0]:.4g} to {law.wanted[1]:.4g}: its travel covers {low:.4g} to "
        f"{high:.4g} ({least[0]:.4g} to {least[1]:.4g} with a track {100 * TRACK_TOLERANCE:g} % short), {shape}; "
        f"{float(board.patch.knobs[law.knob].value):.4g} is at {100 * law.setting:.1f} % of it."
    )


def _multiplier(board: Board, stage: Stage) -> None:
    place = board.places.active[stage.name]
    nodes = board.by_node
    first, second = (w.source for w in stage.wires)
    direct = stage.sign == nodes[first].sign * nodes[second].sign
    x = (first, GROUND) if direct else (GROUND, first)
    nets = (*x, second, GROUND, GROUND, stage.node)
    name, ref = board.target.multiplier.name, place.package + place.section
    board.put(Part(ref, "multiplier", nets, stage=stage.name, package=place.package, section=place.section, model=name))
