"""The bring-up sheet: pins, control lines, order of power-up, and what a voltmeter should show."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from patchplan.circuit.dials import STRAIGHT
from patchplan.circuit.records import GROUND, Circuit, KnobLaw
from patchplan.circuit.wiring import LOGIC, OPERATE, line_of
from patchplan.patch.records import Stage
from patchplan.quantity import engineering
from patchplan.report import words
from patchplan.report.plan_json import transfer_gains
from patchplan.report.records import Plan
from patchplan.report.tables import Table, value_text

#: What a node may be off in hold by offsets and the meter; common practice, no source [V].
_HOLD_TOLERANCE_VOLTS = 0.05
#: Hold lasts this many time constants of the slowest start network, and never less than this [s].
_HOLD_CONSTANTS, _LEAST_HOLD = 10, 1e-3
#: Stretches of a control line that are written out.
_MOST_STRETCHES = 6


def hold_seconds(plan: Plan) -> float | None:
    """How long hold lasts at least [s]; None where the board has none.

    In hold the resistor from the output discharges the capacitor through the virtual ground.
    """
    waits = [v.start[1] * v.capacitor for v in plan.sizing.stages.values() if v.start is not None]
    return max(_HOLD_CONSTANTS * max(waits), _LEAST_HOLD) if waits else None


def steps(plan: Plan) -> tuple[str, ...]:
    """Order of power-up for this board."""
    circuit, wait = plan.circuit, hold_seconds(plan)
    assert circuit is not None
    low, high = circuit.supply
    references = [p.ref for p in circuit.parts if p.kind == "reference"]
    logic = any(pin.net == LOGIC for pin in circuit.wiring)
    told = [words.BARE, *_dials(circuit)]
    told += [words.RAILS.format(low=low, high=high, logic=words.LOGIC if logic else ""), words.FIT]
    if references:
        tolerance = words.percent(100 * plan.target.reference_tolerance)
        told.append(words.REFERENCE.format(ref=references[0], volts=plan.target.reference, tolerance=tolerance))
    else:
        told.append(words.NO_REFERENCE)
    told.append(words.NO_HOLD if wait is None else words.HOLD.format(wait=engineering(wait, "s", 2)))
    told.append((words.OPERATE if wait is not None else words.RUN).format(run=engineering(circuit.duration, "s")))
    trimming = plan.sizing.trimming
    if trimming and trimming.fitted and trimming.trimmers:
        told.append(words.SET_TRIMMERS)
    return tuple(told)


def _dials(circuit: Circuit) -> list[str]:
    """That the dials are set first, and how that is measured; nothing without dials."""
    laws = {law.ref: law for law in circuit.knobs}
    dials = [
        words.DIAL.format(
            ref=part.ref, at=f"{100 * laws[part.ref].setting:.1f}", net=part.nets[0],
            ohm=engineering(laws[part.ref].setting * part.total, "Ω"),
        )
        for part in circuit.parts if part.ref in laws
    ]  # fmt: skip
    return [words.SET_DIALS.format(dials="; ".join(dials))] if dials else []


def control_table(plan: Plan) -> Table:
    """Control lines: what they move and when they are high, in circuit time from the start of operate."""
    circuit, wait = plan.circuit, hold_seconds(plan)
    assert circuit is not None
    moved: dict[str, list[str]] = {}
    sources = {}
    for part in circuit.parts:
        if part.kind == "switch":
            moved.setdefault(line_of(part), []).append(part.ref)
            sources[line_of(part)] = part.control
    rows = []
    for line, refs in moved.items():
        if line == OPERATE:
            run, rest = engineering(circuit.duration, "s"), engineering(wait or 0.0, "s", 2)
            when = words.WHEN_OPERATE.format(run=run, rest=rest)
        else:
            when = _when(circuit, sources[line])
        rows.append((line, " ".join(refs), when))
    return Table("Control lines", ("line", "moves", "high"), tuple(rows), note=words.CONTROL_NOTE)


def _when(circuit: Circuit, source: str) -> str:
    """Stretches in which a step is on."""
    wave = circuit.sources[source].waveform
    assert wave is not None
    run = circuit.duration / circuit.time_scale
    times = np.array([0.0, *wave.jumps(run)])
    on = np.append(wave.values(times) != 0.0, [False])
    before = np.append([False], on[:-1])
    starts, ends = times[on[:-1] & ~before[:-1]], np.append(times, run)[~on & before]
    told = []
    for start, end in zip(starts[:_MOST_STRETCHES], ends, strict=False):
        until = "on" if end >= run else f"to {engineering(end * circuit.time_scale, 's')}"
        told.append(f"from {engineering(start * circuit.time_scale, 's')} {until}")
    return ", ".join(told) + (", and so on" if len(starts) > _MOST_STRETCHES else "")


def package_table(plan: Plan) -> Table:
    """Every package, pin by pin."""
    assert plan.circuit is not None
    models = {p.package or p.ref: p.model for p in plan.circuit.parts if p.kind != "decoupling"}
    pins: dict[str, list[str]] = {}
    for pin in sorted(plan.circuit.wiring, key=lambda pin: (len(pin.package), pin.package, pin.number)):
        pins.setdefault(pin.package, []).append(
            f"{pin.number}\N{NO-BREAK SPACE}{'ground' if pin.net == GROUND else pin.net}"
        )
    rows = tuple((package, models[package], ", ".join(listed)) for package, listed in pins.items())
    return Table("Packages, pin by pin", ("package", "type", "pin and net"), rows, note=words.PIN_NOTE)


def serial_table(plan: Plan) -> Table:
    """Parts on hand that are single pieces: each has its place."""
    assert plan.circuit is not None
    rows = tuple(
        (p.serial, p.ref, value_text(p), f"{p.nets[0]} to {p.nets[1]}") for p in plan.circuit.parts if p.serial
    )
    return Table("Parts by serial number", ("serial", "place", "value", "nets"), rows, note=words.SERIAL_NOTE)


def knob_table(plan: Plan) -> Table:
    """Law of every potentiometer: what its knob stands at along its travel."""
    assert plan.circuit is not None
    laws = plan.circuit.knobs
    headers = ("travel", *(f"{law.ref}: {_scale_of(law)}" for law in laws))
    marks = [point[0] for point in laws[0].points] if laws else []
    rows = tuple((f"{100 * mark:.0f} %", *(_mark(law, i) for law in laws)) for i, mark in enumerate(marks))
    told = [
        words.KNOB_NOTE.format(
            ref=law.ref, low=law.wanted[0], high=law.wanted[1], knob=law.knob,
            at=f"{100 * law.setting:.1f}",
            shape=words.LINEAR if law.bend < STRAIGHT else words.BENT.format(bend=words.percent(100 * law.bend)),
        )
        for law in laws
    ]  # fmt: skip
    return Table("Dials", headers, rows, frozenset(range(1, len(headers))), " ".join([*told, words.DIAL_NOTE]))


def _scale_of(law: KnobLaw) -> str:
    """What a dial is marked with: the parameter where all marks inside its range have one."""
    return law.parameter if any(point[2] is not None for point in law.points) else law.knob


def _mark(law: KnobLaw, index: int) -> str:
    _, knob, parameter = law.points[index]
    value = parameter if _scale_of(law) == law.parameter and law.parameter else knob
    return "beyond" if value is None else words.plain(value, 4)


def static_table(plan: Plan, start: Mapping[str, float]) -> Table:
    """What a voltmeter should show at each signal node in hold; the constants alone where the board has none."""
    assert plan.circuit is not None
    allowed, moves = allowances(plan, start), hold_seconds(plan) is None
    rows = tuple(
        (node, meaning.signal, f"{start[node]:+z.3f} V", f"± {allowed[node]:.2f} V")
        for node, meaning in plan.circuit.nodes.items()
        if node in start and not (moves and meaning.signal != "1")
    )
    return Table("Static check", ("node", "signal", "expected", "allowed"), rows, frozenset({2, 3}), words.STATIC_NOTE)


def allowances(plan: Plan, start: Mapping[str, float]) -> dict[str, float]:
    """What each node may be off in hold before something is wrong [V].

    The errors of what feeds a stage go through its gains; each gain may be off by two resistors.
    """
    target = plan.target
    ratio = 2 * target.resistor_tolerance
    off: dict[str, float] = {}
    for stage in plan.patch.stages:
        own = target.reference_tolerance * abs(start.get(stage.node, 0.0))
        if stage.kind == "integrator":
            own += ratio * abs(start.get(stage.node, 0.0))
        elif stage.kind in ("summer", "inverter", "multiplier"):
            own = _passed(plan, stage, start, off, ratio)
        off[stage.node] = own
    return {node: volts + _HOLD_TOLERANCE_VOLTS for node, volts in off.items()}


def _passed(plan: Plan, stage: Stage, start: Mapping[str, float], off: Mapping[str, float], ratio: float) -> float:
    inputs = [(abs(start.get(w.source, 0.0)), off.get(w.source, 0.0)) for w in stage.wires]
    if stage.kind == "multiplier":
        (x, dx), (y, dy) = inputs
        return (x * dy + y * dx + dx * dy) / plan.target.multiplier.scale
    gains = transfer_gains(plan, stage)
    return sum(abs(gain) * (ratio * volts + error) for gain, (volts, error) in zip(gains, inputs, strict=True))
