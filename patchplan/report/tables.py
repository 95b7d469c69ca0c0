"""Tables of a plan: as text for people, and as CSV for programs."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from patchplan.circuit.build import output_loads
from patchplan.circuit.records import KINDS, Circuit, NodeMap, Part
from patchplan.circuit.wiring import line_of
from patchplan.quantity import engineering
from patchplan.report.plan_json import distinct_values, transfer_gains, units_range
from patchplan.report.records import Plan
from patchplan.report.words import percent, plain, times_faster

#: Unit of a part's value, for people and in parts.csv.
VALUE_UNITS = {"resistor": ("Ω", "ohm"), "potentiometer": ("Ω", "ohm"), "capacitor": ("F", "F"),
               "reference": ("V", "V"), "switch": ("Ω", "ohm"), "decoupling": ("F", "F")}  # fmt: skip

#: What a multiplier's input takes at least [ohm]; common practice, no source.
_INPUT_OHM = 1e6


@dataclass(frozen=True)
class Table:
    """A table of texts; ``numeric`` holds the columns that are set flush right."""

    title: str
    headers: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numeric: frozenset[int] = frozenset()
    note: str = ""


OTHER_RUNS = "Swings: in the run of circuit.cir. Of limit: in the run of the check that takes the node furthest."


def node_table(plan: Plan) -> Table:
    """What each node carries: signal, volts per unit, swing and share of its limit."""
    rows = [_node_row(plan, meaning) for meaning in swinging(plan)]
    headers = ("node", "signal", "one unit is", "swings", "of limit")
    several = any(peak.during for peak in plan.verdict.nodes)
    note = " ".join(filter(None, (OTHER_RUNS if several else "", *clipped(plan))))
    return Table("Nodes", headers, tuple(rows), frozenset({2, 3, 4}), note)


def clipped(plan: Plan) -> list[str]:
    """A sentence on each node that is over its limit and would go further: what the equation asks of it."""
    told = []
    meanings = plan.circuit.nodes if plan.circuit else {}
    for peak in (n for n in plan.verdict.nodes if not n.ok and n.node in meanings and n.node in plan.ranges.values):
        meaning = meanings[peak.node]
        values = meaning.sign * meaning.volts_per_unit * plan.ranges.values[peak.node] + meaning.offset_volts
        needed = float(np.max(np.abs(values), initial=0.0))
        if needed > 1.001 * peak.peak_volts and not peak.during:
            share = f"{100 * needed / peak.limit_volts:.0f} % of its limit"
            told.append(f"{peak.node} is clipped: the equation asks for {plain(needed)} V there, {share}.")
    return told


def swinging(plan: Plan) -> list[NodeMap]:
    """The signal nodes of the board but for its constants."""
    nodes = plan.circuit.nodes.values() if plan.circuit else ()
    return [meaning for meaning in nodes if meaning.role != "reference"]


def _node_row(plan: Plan, meaning: NodeMap) -> tuple[str, ...]:
    low, high = swing_volts(plan, meaning)
    share = share_of_limit(plan, meaning)
    unit = engineering(meaning.sign * meaning.volts_per_unit, "V")
    side = "+" if meaning.offset_volts > 0 else "-"
    offset = f" {side} {plain(abs(meaning.offset_volts))} V" if meaning.offset_volts else ""
    return meaning.node, meaning.signal, unit + offset, f"{low:z.1f} … {high:z.1f} V", f"{100 * share:.0f} %"


def share_of_limit(plan: Plan, meaning: NodeMap) -> float:
    """How much of its limit a node takes in the run of the check that takes it furthest, a fraction."""
    peaks = [peak.peak_volts for peak in plan.verdict.nodes if peak.node == meaning.node]
    furthest = max(*map(abs, swing_volts(plan, meaning)), *peaks)
    return furthest / meaning.limit_volts if meaning.limit_volts else 0.0


def swing_volts(plan: Plan, meaning: NodeMap) -> tuple[float, float]:
    """Lowest and highest voltage of a node: in the check, or as planned where the check has none [V]."""
    volts = plan.verdict.volts.get(meaning.node)
    if volts is not None and volts.size:
        return float(np.min(volts)), float(np.max(volts))
    ends = [meaning.sign * meaning.volts_per_unit * end + meaning.offset_volts for end in units_range(plan, meaning)]
    return min(ends), max(ends)


def coefficient_table(plan: Plan) -> Table:
    """Every coefficient: wanted, realised, error."""
    rows = tuple(
        (c.at, f"{c.wanted:.6g}", f"{c.realised:.6g}", f"{c.error_percent:+.3f} %") for c in plan.sizing.coefficients
    )
    note = (
        "In problem units, after all rounding, with the fitted scale factors and speed; what the operate switches and "
        "the bandwidth of the op amps take is counted."
    )
    return Table("Coefficients", ("at", "wanted", "realised", "error"), rows, frozenset({1, 2, 3}), note)


def form_table(plan: Plan) -> Table:
    """The forms of linear blocks that were weighed, the chosen ones marked."""

    def shown(value: float | None) -> str:
        return "" if value is None else percent(value)

    rows = tuple(
        (row.block, row.form, str(row.stages or ""), str(row.wires or ""), shown(row.tolerance_percent),
         shown(row.error_percent), shown(row.spread_percent), row.reason or ("chosen" if row.chosen else ""))
        for row in plan.considered
    )  # fmt: skip
    headers = ("block", "form", "stages", "wires", "tolerances", "error", "spread", "")
    note = (
        "Stages and wires are those of the whole board. Tolerances: spread of the watched signals by resistors and "
        "capacitors, before values are chosen. Error and spread: of a board planned in that form. What a form costs "
        "is error and spread times stages and wires, and a quarter more where it is not the form of the file."
    )
    return Table("Forms considered", headers, rows, frozenset(range(2, 7)), note)


def loop_table(plan: Plan) -> Table:
    """Every independent loop of the gains and its error; no rows where scale factors take up everything."""
    loops = plan.sizing.loops
    rows = tuple((loop.name, "sets the speed" if loop.absorbed else f"{100 * loop.error:+.3f} %") for loop in loops)
    note = "What no choice of scale factors can take away; ← runs against a wire, ⇢ sets a start value."
    if any(loop.absorbed for loop in loops):
        note += " The free speed takes up the time constant of one loop, and the others count relative to that one."
    return Table("Loops", ("loop", "error"), rows, frozenset({1}), note)


def stage_table(plan: Plan) -> Table:
    """Every stage with its output, inputs and values."""
    rows = tuple(_stage_row(plan, index) for index in range(len(plan.patch.stages))) if plan.circuit else ()
    return Table("Stages", ("stage", "kind", "output", "inputs and gains", "start"), rows, frozenset({4}))


def _stage_row(plan: Plan, index: int) -> tuple[str, ...]:
    stage = plan.patch.stages[index]
    values = plan.sizing.stages.get(stage.name)
    unit = {"integrator": "/s", "multiplier": "/V"}.get(stage.kind, "")
    gains = transfer_gains(plan, stage)
    if stage.kind == "multiplier":
        inputs = f"{' × '.join(w.source for w in stage.wires)} × {plain(gains[0])}{unit}"
    else:
        pairs = zip(stage.wires, gains, strict=True)
        inputs = ", ".join(f"{wire.source} × {plain(gain, 4)}{unit}" for wire, gain in pairs)
    if stage.kind == "integrator" and values and values.feedback:
        inputs += f", DC limit {engineering(values.feedback, 'Ω')}"
    start = f"{values.start_volts:z.3f} V" if values and stage.kind == "integrator" else ""
    return stage.name, stage.kind, stage.node, inputs, start


def parts_table(circuit: Circuit) -> Table:
    """What to buy: parts gathered by kind and value, sections by package."""
    groups: dict[tuple[int, float, str, str, str], dict[str, None]] = {}
    for part in circuit.parts:
        if part.kind != "source":
            order = (list(KINDS).index(part.kind), part.total or part.value)
            bought = groups.setdefault((*order, part.kind, value_text(part), part.model), {})
            # A capacitor names the package that it stands at, and is a piece of its own.
            bought[part.ref if part.kind == "decoupling" else part.package or part.ref] = None
    rows = tuple((str(len(refs)), *key[2:], _shortened(list(refs))) for key, refs in sorted(groups.items()))
    differ = distinct_values(circuit)
    note = f"{differ['resistor']} different values of resistors, {differ['capacitor']} of capacitors."
    return Table("Parts", ("count", "kind", "value", "type", "references"), rows, frozenset({0}), note)


def value_text(part: Part) -> str:
    """Value of a part for people; "" where it has none."""
    if part.kind == "potentiometer":
        return f"{engineering(part.total, 'Ω')} set to {part.value:.3f}"
    if part.kind not in VALUE_UNITS or not part.value:
        return ""
    tolerance = f" {percent(100 * part.tolerance)}" if part.tolerance else ""
    unit = VALUE_UNITS[part.kind][0]
    if part.marked:
        return f"{engineering(part.marked, unit)}, measured {engineering(part.value, unit, 6)}{tolerance}"
    return engineering(part.value, unit) + tolerance


def speed_table(plan: Plan) -> Table:
    """Every figure that limits the speed, those that set the window's ends first."""
    unit = float(plan.system.time_unit_seconds)
    rows = tuple(
        (f"{x.end}, {'hard' if x.hard else 'soft'}", x.stage, x.part, x.figure, engineering(x.value, x.unit),
         engineering(x.time_scale, "s"), times_faster(unit / x.time_scale))
        for x in plan.sizing.speed_limits if x.time_scale > 0 and x.figure
    )  # fmt: skip
    note = (
        "The first row of each end sets it. A bandwidth, bias current, offset or gain is at its limit where it alone "
        "costs 1 % of peak, all stages together; the stage is the one that adds most. A slew rate is at its limit at "
        "half its figure. Beyond these soft limits a board can be built, at a larger error; beyond a hard one no "
        "values reach."
    )
    headers = ("end", "stage", "part", "figure", "value", f"1 {plan.system.time_unit} takes", "times real time")
    return Table("Limits of the speed", headers, rows, frozenset({4, 5, 6}), note)


def budget_table(plan: Plan) -> Table:
    """Where the error comes from, largest first."""
    rows = tuple(
        (c.cause, percent(c.error_percent)) for c in sorted(plan.verdict.budget, key=lambda c: -c.error_percent)
    )
    note = "Each line alone, percent of the signal's peak; lines may cancel in the sum."
    return Table("Error budget", ("cause", "error"), rows, frozenset({1}), note)


def signal_table(plan: Plan) -> Table:
    """Errors of every watched signal."""
    rows = tuple(
        (s.name, *map(percent, (s.max_error_percent, s.rms_error_percent, s.spread_percent, s.stretched_error_percent)),
         f"{s.frequency_error_percent:+.3f} %")
        for s in plan.verdict.signals
    )  # fmt: skip
    headers = ("signal", "largest", "rms", "spread of boards", "after best stretch", "frequency")
    note = "Percent of peak (of half the swing where the node carries an offset)."
    return Table("Watched signals", headers, rows, frozenset(range(1, 6)), note)


def source_table(plan: Plan, files: dict[str, str]) -> Table:
    """Signals that come from outside: scale, file, and what impedance they may have.

    Parameters
    ----------
    files
        Source name -> name of its waveform file.
    """
    rows = [_source_row(plan, stage.signal, stage.node, stage.sign, files) for stage in plan.patch.stages
            if stage.kind == "source" and stage.signal in files] if plan.circuit else []  # fmt: skip
    note = "A source impedance above this takes more than 0.1 % of the signal."
    return Table(
        "Sources", ("source", "node", "one unit is", "impedance up to", "file"), tuple(rows), frozenset({2, 3}), note
    )


def _source_row(plan: Plan, name: str, node: str, sign: int, files: dict[str, str]) -> tuple[str, ...]:
    scale = plan.sizing.scales[node].volts_per_unit
    # All legs load the source together; the drop over its impedance is the same for each.
    load = output_loads(plan.circuit.parts if plan.circuit else ()).get(node, _INPUT_OHM)
    return name, node, engineering(sign * scale, "V"), engineering(load / 1000, "Ω", 2), files[name]


def nodes_csv(data: dict[str, Any]) -> str:
    """nodes.csv: the ``signals`` of plan.json with the check's peaks."""
    peaks = {row["node"]: row for row in data["check"]["nodes"]}
    headers = tuple(data["signals"][0]) if data["signals"] else ()
    rows = [
        (*row.values(), peaks[row["node"]]["peak_volts"] if row["node"] in peaks else "") for row in data["signals"]
    ]
    return csv_text((*headers, "checked_peak_volts"), rows)


def parts_csv(circuit: Circuit) -> str:
    """parts.csv: one row a part, values in SI units."""
    headers = (
        "ref", "kind", "value", "unit", "tolerance_percent", "model", "nets", "stage", "package", "section", "pins",
        "closed", "control_line", "setting", "serial", "marked",
    )  # fmt: skip
    return csv_text(headers, map(_part_row, circuit.parts))


def _part_row(part: Part) -> tuple[Any, ...]:
    value = part.total if part.kind == "potentiometer" else part.value
    unit = VALUE_UNITS.get(part.kind, ("", ""))[1]
    tolerance = f"{100 * part.tolerance:.9g}" if part.tolerance else ""
    shown = f"{value:.9g}" if unit else ""
    return (
        part.ref,
        part.kind,
        shown,
        unit,
        tolerance,
        part.model,
        " ".join(part.nets),
        part.stage,
        part.package,
        part.section,
        " ".join(map(str, part.pins)),
        part.closed,
        line_of(part) if part.kind == "switch" else "",
        f"{part.value:.9g}" if part.kind == "potentiometer" else "",
        part.serial,
        f"{part.marked:.9g}" if part.marked else "",
    )


def csv_text(headers: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """CSV with plain line ends."""
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(headers)
    writer.writerows(rows)
    return buffer.getvalue()


def _shortened(refs: Sequence[str], most: int = 12) -> str:
    return " ".join(refs[:most]) + (f" and {len(refs) - most} more" if len(refs) > most else "")
