"""plan.json: the contract between a plan and whatever reads it later."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from patchplan.check.records import Verdict
from patchplan.circuit.records import Circuit, KnobLaw, NodeMap
from patchplan.compare.records import SpeedCurve
from patchplan.equation.problem import Problem
from patchplan.patch.records import Patch, Stage
from patchplan.report.codec import decode, encode, rounded
from patchplan.report.ranges_told import ranges_data, ranges_sentence
from patchplan.report.records import Plan
from patchplan.report.worst import worst_inputs
from patchplan.sizing.records import Sizing, StageSizing
from patchplan.version import __version__

CONTRACT = 1
#: What a node carries, by the kind of the stage that drives it.
ROLES = {"integrator": "state", "summer": "signal", "inverter": "signal", "multiplier": "product"}


def plan_data(plan: Plan, files: Sequence[str] = ()) -> dict[str, Any]:
    """Everything that plan.json holds, as plain data in the order of the contract.

    Parameters
    ----------
    plan
        The plan; one that cannot be built gives a verdict and empty tables.
    files
        Names of the files of the folder.
    """
    sizing = plan.sizing
    return {
        "contract": CONTRACT,
        "title": plan.problem.title,
        "version": __version__,
        "files": list(files),
        "warnings": list(sentences_of(plan)),
        "notes": list(notes_of(plan)),
        "faults": list(sizing.faults),
        "time_scale": rounded(sizing.time_scale),
        "time_scale_window": [rounded(end) for end in sizing.window],
        "time_scale_limits": list(sizing.limits),
        "speed_limits": encode(sizing.speed_limits),
        "speed_outside": sizing.outside,
        "speed_curve": _speed_curve(plan.speed_curve),
        "check": _check(plan.verdict),
        "signals": _signals(plan, plan.circuit) if plan.circuit else [],
        "stages": [_stage(plan, stage) for stage in plan.patch.stages] if plan.circuit else [],
        "counts": dict(sorted(plan.patch.counts().items())),
        "sign_stages": plan.patch.sign_stages,
        "sign_stages_lower_bound": plan.patch.sign_stages_lower_bound,
        "sign_search_stopped": plan.patch.signs_open,
        "sign_stages_gap": plan.patch.sign_stages - plan.patch.sign_stages_lower_bound,
        "ranges": ranges_data(plan),
        "worst_inputs": worst_inputs(plan),
        "coefficients": _coefficients(sizing),
        "loops": [
            {"name": loop.name, "error_percent": rounded(100.0 * loop.error), "absorbed": loop.absorbed}
            for loop in sizing.loops
        ],
        "distinct_values": distinct_values(plan.circuit) if plan.circuit else {},
        "parts": _parts(plan.circuit) if plan.circuit else [],
        "knobs": [_knob(law) for law in plan.circuit.knobs] if plan.circuit else [],
        "choices": encode(plan.choices),
        "considered": encode(plan.considered),
        "problem": plan.problem.text,
        "records": records_of(plan),
    }


def refusal_data(problem: Problem, reason: str, files: Sequence[str] = ()) -> dict[str, Any]:
    """What plan.json holds where the parts rule a problem out before anything is planned."""
    verdict = Verdict("not_buildable", math.nan, math.nan, math.nan, None, (), (), ())
    return {
        "contract": CONTRACT,
        "title": problem.title,
        "version": __version__,
        "files": list(files),
        "warnings": [reason],
        "notes": [],
        "faults": [reason],
        "time_scale": None,
        "time_scale_window": [None, None],
        "time_scale_limits": ["", ""],
        "speed_limits": [],
        "speed_outside": "",
        "speed_curve": None,
        "check": _check(verdict),
        **{table: [] for table in ("signals", "stages", "worst_inputs", "coefficients", "loops", "parts", "knobs")},
        "ranges": {},
        "counts": {},
        "distinct_values": {},
        "sign_stages": 0,
        "sign_stages_lower_bound": 0,
        "sign_search_stopped": False,
        "sign_stages_gap": 0,
        "choices": {},
        "considered": [],
        "problem": problem.text,
        "records": {"patch": {}, "sizing": {}, "circuit": None},
    }


def plan_text(data: dict[str, Any]) -> str:
    """Text of plan.json: one row of a table a line.

    Raises
    ------
    ValueError
        Where a number is not finite.
    """
    return "{\n" + ",\n".join(f"{_json(key)}: {_value(value)}" for key, value in data.items()) + "\n}\n"


def records_of(plan: Plan) -> dict[str, Any]:
    """Patch, Sizing and Circuit as data; sources that the Patch holds already are not repeated."""
    circuit = encode(plan.circuit)
    if plan.circuit and plan.circuit.sources == plan.patch.sources:
        circuit["sources"] = None
    return {"patch": encode(plan.patch), "sizing": encode(plan.sizing), "circuit": circuit}


def rebuild(data: dict[str, Any]) -> tuple[Patch, Sizing, Circuit | None]:
    """Patch, Sizing and Circuit from the ``records`` of plan.json.

    Numbers come back to 9 digits, exact rationals exactly, without the origins of terms. The Circuit is None where the
    plan could not be built.
    """
    patch: Patch = decode(Patch, data["patch"])
    sizing: Sizing = decode(Sizing, data["sizing"])
    circuit = data["circuit"]
    if circuit is not None and circuit["sources"] is None:
        circuit = {**circuit, "sources": data["patch"]["sources"]}
    return patch, sizing, decode(Circuit | None, circuit)


def sentences_of(plan: Plan) -> tuple[str, ...]:
    """All that the stages have to say, each sentence once, in the order of the stages."""
    return tuple(dict.fromkeys((*plan.reach.warnings, *plan.warnings, *plan.verdict.warnings)))


def warnings_of(plan: Plan) -> tuple[str, ...]:
    """The sentences that are no note on a decision and no reason of a failure."""
    told = {*notes_of(plan), *plan.sizing.faults}
    return tuple(sentence for sentence in sentences_of(plan) if sentence not in told)


def notes_of(plan: Plan) -> tuple[str, ...]:
    """What the stages decided and why, each sentence once."""
    told = (*plan.form.notes, ranges_sentence(plan), *plan.sizing.notes, *(plan.circuit.notes if plan.circuit else ()))
    return tuple(note for note in dict.fromkeys(told) if note)


def transfer_gains(plan: Plan, stage: Stage) -> tuple[float, ...]:
    """Gain of each input of a stage, as built.

    Integrators: [1/s of circuit time], the operate switch in series with all inputs counted; summers and inverters:
    [V/V]; multipliers: the gain [1/V] of the product, once for each input and signed, since differential inputs give
    either polarity.
    """
    values = plan.sizing.stages.get(stage.name, StageSizing(stage.name))
    if stage.kind == "multiplier":
        signs = {s.node: s.sign for s in plan.patch.stages}
        sign = stage.sign * math.prod(signs[wire.source] for wire in stage.wires)
        return (sign / plan.target.multiplier.scale,) * len(stage.wires)
    if stage.kind == "integrator":
        switch = plan.target.switch_on if values.start is not None else 0.0
        loss = 1.0 + switch * sum(1.0 / leg.into for leg in values.legs)
        return tuple(1.0 / (leg.transfer * values.capacitor * loss) for leg in values.legs)
    if stage.bipolar:
        return _bipolar_gains(plan, stage)
    knob = plan.patch.knobs[stage.knob] if stage.knob else None
    share = float(abs(knob.value) / knob.size) if knob else 1.0
    return tuple(share * values.feedback / leg.transfer for leg in values.legs)


def _bipolar_gains(plan: Plan, stage: Stage) -> tuple[float, ...]:
    """Net gain of a potentiometer between both polarities of one signal, counted on its first end."""
    wire, scales, signs = stage.wires[0], plan.sizing.scales, {s.node: s.sign for s in plan.patch.stages}
    knob = float(plan.patch.knobs[stage.knob].value) if stage.knob else 1.0
    ratio = scales[stage.node].volts_per_unit / scales[wire.source].volts_per_unit
    return (-float(wire.coefficient) * knob * ratio * stage.sign * signs[wire.source], 0.0)


def _stage(plan: Plan, stage: Stage) -> dict[str, Any]:
    values = plan.sizing.stages.get(stage.name, StageSizing(stage.name))
    inputs = [
        {"node": wire.source, "gain": rounded(gain)}
        for wire, gain in zip(stage.wires, transfer_gains(plan, stage), strict=True)
    ]
    if stage.kind == "integrator" and values.feedback:
        inputs.append({"node": stage.node, "gain": rounded(1 / (values.feedback * values.capacitor))})
    return {
        "name": stage.name,
        "kind": stage.kind,
        "output": stage.node,
        "start_volts": rounded(values.start_volts) if stage.kind == "integrator" else None,
        "inputs": inputs,
    }


def _signals(plan: Plan, circuit: Circuit) -> list[dict[str, Any]]:
    return [_signal(plan, circuit, meaning) for meaning in circuit.nodes.values()]


def _signal(plan: Plan, circuit: Circuit, meaning: NodeMap) -> dict[str, Any]:
    low, high = units_range(plan, meaning)
    peak = max(abs(meaning.volts_per_unit * end * meaning.sign + meaning.offset_volts) for end in (low, high))
    return {
        "name": meaning.signal,
        "node": meaning.node,
        "role": ROLES.get(meaning.role, meaning.role),
        "watched": meaning.node in circuit.watched.values(),
        "volts_per_unit": rounded(meaning.volts_per_unit),
        "sign": meaning.sign,
        "offset_volts": rounded(meaning.offset_volts),
        "low_units": rounded(low),
        "high_units": rounded(high),
        "peak_units": rounded(max(abs(low), abs(high))),
        "peak_volts": rounded(peak),
        "limit_volts": rounded(meaning.limit_volts),
        # A constant that the board adds for its own steps is in no range.
        "known_by": plan.ranges.nodes[meaning.node].known_by if meaning.node in plan.ranges.nodes else "proved",
    }


def units_range(plan: Plan, meaning: NodeMap) -> tuple[float, float]:
    """Lowest and highest value of a node's signal [problem units], its offset included."""
    planned = plan.ranges.nodes.get(meaning.node)
    if planned is None:
        return 1.0, 1.0
    offset = -meaning.offset_volts / (meaning.sign * meaning.volts_per_unit)
    return planned.low + offset, planned.high + offset


def distinct_values(circuit: Circuit) -> dict[str, int]:
    """How many different values the board needs of each passive part that there is a series of."""
    return {kind: len({p.value for p in circuit.parts if p.kind == kind}) for kind in ("resistor", "capacitor")}


def _coefficients(sizing: Sizing) -> list[dict[str, Any]]:
    return [
        {
            "at": row.at,
            "wanted": rounded(row.wanted),
            "realised": rounded(row.realised),
            "error_percent": rounded(row.error_percent),
        }
        for row in sizing.coefficients
    ]


def _speed_curve(curve: SpeedCurve | None) -> dict[str, Any] | None:
    if curve is None:
        return None

    def figures(pair: tuple[float, float]) -> dict[str, Any]:
        return {"error_percent": rounded(pair[0]), "spread_percent": rounded(pair[1])}

    return {
        "time_scales": encode(curve.time_scales),
        "error_percent": encode(curve.error),
        "spread_percent": encode(curve.spread),
        "error_parts": encode(curve.parts),
        "spread_parts": encode(curve.spreads),
        "chosen": figures(curve.chosen),
        "real_time": figures(curve.real_time) | {"judgement": curve.judgement, "reason": curve.reason},
    }


def _parts(circuit: Circuit) -> list[dict[str, Any]]:
    return [encode(part) for part in circuit.parts]


def _knob(law: KnobLaw) -> dict[str, Any]:
    """Potentiometer, range, travel and law of a knob; settings are shares of the travel from end a."""
    names = ("setting", "knob", "parameter")
    return {
        "name": law.knob,
        "parameter": law.parameter,
        "ref": law.ref,
        "stage": law.stage,
        "from": rounded(law.wanted[0]),
        "to": rounded(law.wanted[1]),
        "covers": [rounded(end) for end in law.covers],
        "covers_at_least": [rounded(end) for end in law.covers_least],
        "setting": rounded(law.setting),
        "bend_percent": rounded(100 * law.bend),
        "law": [
            {name: None if number is None else rounded(number) for name, number in zip(names, point, strict=True)}
            for point in law.points
        ],
    }


def _check(verdict: Verdict) -> dict[str, Any]:
    def finite(row: dict[str, Any]) -> dict[str, Any]:
        return {key: None if isinstance(item, str) and key.endswith("_percent") else item for key, item in row.items()}

    if verdict.verdict == "not_buildable":
        verdict = replace(verdict, max_error_percent=math.nan, rms_error_percent=math.nan, spread_percent=math.nan)
    data = {
        "verdict": verdict.verdict,
        "max_error_percent": rounded(verdict.max_error_percent),
        "rms_error_percent": rounded(verdict.rms_error_percent),
        "spread_percent": rounded(verdict.spread_percent),
        "horizon": None if verdict.horizon is None else rounded(verdict.horizon),
    }
    tables = {name: encode(getattr(verdict, name)) for name in ("signals", "nodes", "budget")}
    return data | {name: [finite(row) for row in rows] for name, rows in tables.items()}


def _value(value: Any) -> str:
    if isinstance(value, list) and value:
        return "[\n" + ",\n".join(f"  {_json(row)}" for row in value) + "\n]"
    if isinstance(value, dict) and value:
        return "{\n" + ",\n".join(f"  {_json(key)}: {_json(item)}" for key, item in value.items()) + "\n}"
    return _json(value)


def _json(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)
