"""Trimming, for the bring-up sheet and plan.json."""

from __future__ import annotations

from typing import Any

from patchplan.circuit.trimmers import TRIMMER, Trim, find_trims
from patchplan.quantity import engineering
from patchplan.report import words
from patchplan.report.codec import rounded
from patchplan.report.records import Plan
from patchplan.report.tables import Table
from patchplan.sizing.trim_records import Trimmer


def trimming_table(plan: Plan) -> Table:
    """Trimmers in setting order: what each is made of, what to watch, and where to stop; fitted or suggested."""
    trimming, headers = plan.sizing.trimming, ("trimmer", "at", "made of", "watch", "turn until")
    title = "Trimming" if trimming and trimming.fitted else "Trimming that would help"
    if trimming is None or not trimming.trimmers:
        return Table(title, headers, ())
    trims = find_trims(plan.patch, plan.sizing, plan.target)
    rows = tuple(_row(plan, trimmer, trims[trimmer.stage, trimmer.wire]) for trimmer in trimming.trimmers)
    before, after = (words.percent(100 * spread) for spread in (trimming.before, trimming.after))
    note = words.TRIM_NOTE.format(before=before, after=after)
    note += words.TRIM_ONCE if trimming.rounds == 1 else words.TRIM_ROUNDS.format(rounds=trimming.rounds)
    return Table(title, headers, rows, note=note + ("" if trimming.fitted else words.TRIM_WISH))


def trimming_data(plan: Plan) -> dict[str, Any] | None:
    """``trimming`` of plan.json; None where it was not looked at."""
    trimming = plan.sizing.trimming
    if trimming is None or plan.circuit is None:
        return None
    trims = find_trims(plan.patch, plan.sizing, plan.target)
    return {
        "fitted": trimming.fitted,
        "loops": trimming.loops,
        "fewest_proved": trimming.least,
        "rounds": trimming.rounds,
        "spread_before_percent": rounded(100 * trimming.before),
        "spread_after_percent": rounded(100 * trimming.after),
        "trimmers": [_data(plan, t, trims[t.stage, t.wire]) for t in trimming.trimmers],
    }


def trimmer_ref(plan: Plan, trimmer: Trimmer) -> str:
    """Designator of a fitted trimmer, or of the resistor that a suggested one would replace."""
    assert plan.circuit is not None
    stage = next(s for s in plan.patch.stages if s.name == trimmer.stage)
    into = {f"{stage.node}_ic"} if trimmer.wire < 0 else {f"{stage.node}_bus", f"{stage.node}_inv"}
    source = "" if trimmer.wire < 0 else stage.wires[trimmer.wire].source
    between = f"{stage.node}_tr{'i' if trimmer.wire < 0 else trimmer.wire + 1}"
    for part in plan.circuit.parts:
        own = part.stage == stage.name and part.nets[1] in into
        if own and part.model == TRIMMER and part.nets[0] in (between, source):
            return part.ref
        if own and part.kind == "resistor" and part.nets[0] != stage.node and part.nets[0] in (source or part.nets[0],):
            return part.ref
    return ""


def _reading(plan: Plan, trimmer: Trimmer) -> tuple[str, float, float]:
    """Node, volts there, and circuit time [s]."""
    assert plan.circuit is not None
    node = plan.circuit.watched[trimmer.watch]
    meaning = plan.circuit.nodes[node]
    volts = meaning.sign * meaning.volts_per_unit * trimmer.value + meaning.offset_volts
    return node, volts, trimmer.time * plan.sizing.time_scale


def _row(plan: Plan, trimmer: Trimmer, trim: Trim) -> tuple[str, ...]:
    node, volts, time = _reading(plan, trimmer)
    track = f"{engineering(trim.track, 'Ω')} trimmer, begun at {100 * trim.setting:.0f} %"
    fixed = f"{engineering(trim.fixed, 'Ω')} and " if trim.fixed else ""
    when = words.TRIM_START if trimmer.time == 0.0 else words.TRIM_TIME.format(time=engineering(time, "s", 4))
    return (
        trimmer_ref(plan, trimmer), _place(plan, trimmer), fixed + track,
        f"{trimmer.watch} at {node}, {trimmer.figure} {when}", f"{volts:+z.4f} V",
    )  # fmt: skip


def _place(plan: Plan, trimmer: Trimmer) -> str:
    stage = next(s for s in plan.patch.stages if s.name == trimmer.stage)
    source = "start value" if trimmer.wire < 0 else stage.wires[trimmer.wire].source
    return f"{stage.name}, {source}"


def _data(plan: Plan, trimmer: Trimmer, trim: Trim) -> dict[str, Any]:
    node, volts, time = _reading(plan, trimmer)
    return {
        "ref": trimmer_ref(plan, trimmer),
        "stage": trimmer.stage,
        "input": trimmer.wire,
        "ohms": rounded(trimmer.ohms),
        "reach_percent": rounded(100 * trimmer.reach),
        "fixed": rounded(trim.fixed),
        "track": rounded(trim.track),
        "setting": rounded(trim.setting),
        "watch": trimmer.watch,
        "node": node,
        "figure": trimmer.figure,
        "circuit_time": rounded(time),
        "volts": rounded(volts),
        "units": rounded(trimmer.value),
        "units_per_percent": rounded(trimmer.per_percent),
    }
