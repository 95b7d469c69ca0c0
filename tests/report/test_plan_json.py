"""plan.json holds to its schema and rebuilds the records."""

from __future__ import annotations

import json
import math
import re
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import jsonschema
import numpy as np
import pytest

import patchplan.report
from patchplan.check.records import Verdict
from patchplan.equation.tree import Node, Number
from patchplan.equation.waveform import Waveform
from patchplan.report.codec import decode, encode
from patchplan.report.plan_json import plan_data, plan_text, rebuild, records_of, refusal_data, transfer_gains
from patchplan.report.records import Plan

SCHEMA = json.loads(Path(patchplan.report.__file__).with_name("plan.schema.json").read_text(encoding="utf-8"))


def unbuildable(plan: Plan) -> Plan:
    faults = ("No resistor of the series is large enough.",)
    verdict = Verdict("not_buildable", math.nan, math.nan, math.inf, None, (), (), (), warnings=faults)
    return replace(
        plan, circuit=None, sizing=replace(plan.sizing, faults=faults, scales={}, stages={}), verdict=verdict
    )


def read_back(plan: Plan) -> dict:
    def refuse(word):
        raise AssertionError(f"{word} is no JSON")

    return json.loads(plan_text(plan_data(plan, ["plan.json"])), parse_constant=refuse)


def test_refusal_holds_to_the_schema(plan):
    data = json.loads(plan_text(refusal_data(plan.problem, "The supply is too low.", ["plan.json"])))
    jsonschema.validate(data, SCHEMA)
    assert set(data) == set(plan_data(plan))


def test_schema_is_itself_sound():
    jsonschema.Draft202012Validator.check_schema(SCHEMA)


def test_plan_holds_to_the_schema(plan):
    jsonschema.validate(read_back(plan), SCHEMA)


def test_plan_that_cannot_be_built_holds_to_the_schema_without_nan(plan):
    data = read_back(unbuildable(plan))
    jsonschema.validate(data, SCHEMA)
    assert data["check"]["verdict"] == "not_buildable"
    assert data["check"]["max_error_percent"] is None
    assert data["faults"] == ["No resistor of the series is large enough."]
    assert data["signals"] == data["stages"] == data["parts"] == []


@pytest.mark.parametrize("key", SCHEMA["required"])
def test_schema_misses_every_key_of_the_contract(plan, key):
    data = read_back(plan)
    del data[key]
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(data, SCHEMA)


def test_numbers_have_at_most_nine_digits(plan):
    text = plan_text(plan_data(plan))
    long = [n for n in re.findall(r'(?<!["\d/])-?\d+\.\d+', text) if len(n.strip("-0.").replace(".", "")) > 9]
    assert long == []


def test_records_come_back(plan):
    patch, sizing, circuit = rebuild(json.loads(json.dumps(records_of(plan))))
    assert patch == replace(plan.patch, sources=patch.sources)
    assert str(circuit) == str(plan.circuit)
    assert {n: v.legs for n, v in sizing.stages.items()} == {n: v.legs for n, v in plan.sizing.stages.items()}
    assert sizing.stages["INT1"].start_volts == pytest.approx(20 / 3, rel=5e-9)
    assert sizing.scales["x_d"].volts_per_unit == pytest.approx(plan.sizing.scales["x_d"].volts_per_unit, rel=5e-9)
    recording = patch.sources["drive"].waveform.recording
    np.testing.assert_allclose(recording.values, plan.patch.sources["drive"].waveform.recording.values, rtol=5e-9)


def test_records_that_came_back_give_the_same_records(plan):
    data = records_of(plan)
    patch, sizing, circuit = rebuild(data)
    again = replace(plan, patch=patch, sizing=sizing, circuit=circuit)
    assert records_of(again) == data


def test_trees_of_every_kind_come_back():
    from patchplan.equation.syntax import parse_equation

    tree = parse_equation("x' = -2.5*sin(t)^2/(3*t) - x", 0, names=frozenset({"x"})).right
    assert decode(Node, json.loads(json.dumps(encode(tree)))) == tree
    wave = Waveform(tree=Number(Fraction(1, 3)))
    assert decode(Waveform, encode(wave)) == wave


def test_signal_rows_give_the_volts_back(plan):
    rows = {row["node"]: row for row in plan_data(plan)["signals"]}
    for node, volts in plan.verdict.volts.items():
        row = rows[node]
        units = (volts - row["offset_volts"]) / (row["sign"] * row["volts_per_unit"])
        slack = 0.01 * row["peak_units"]  # the board is a little off the planned range
        if not row["offset_volts"]:
            assert units.min() >= row["low_units"] - slack
            assert units.max() <= row["high_units"] + slack


def currents(legs, switch):
    """Current into the virtual ground per volt at each leg, by nodal analysis of the legs and the switch they share."""
    size = 1 + len(legs)
    conductance = np.zeros((size, size))
    source = np.zeros((size, len(legs)))
    conductance[0, 0] += 1 / switch
    for k, resistors in enumerate(legs):
        if len(resistors) == 1:
            conductance[0, 0] += 1 / resistors[0]
            conductance[k + 1, k + 1] = 1.0
            source[0, k] = 1 / resistors[0]
            continue
        first, shunt, last = resistors
        conductance[k + 1, k + 1] = 1 / first + 1 / shunt + 1 / last
        conductance[0, 0] += 1 / last
        conductance[0, k + 1] = conductance[k + 1, 0] = -1 / last
        source[k + 1, k] = 1 / first
    return np.linalg.solve(conductance, source)[0] / switch


def test_gains_are_those_of_the_parts(plan):
    gains = {s.name: transfer_gains(plan, s) for s in plan.patch.stages}
    assert gains["INT1"] == pytest.approx(currents([(47e3,)], 100.0) / 1e-7, rel=1e-9)
    assert gains["INT2"] == pytest.approx(currents([(47e3,), (10e3, 1e3, 12e3)], 100.0) / 1e-7, rel=1e-9)
    assert gains["INV1"] == pytest.approx([1.0])


def test_dc_limit_resistor_is_an_input_from_its_own_node(plan):
    stage = next(s for s in plan_data(plan)["stages"] if s["name"] == "INT2")
    assert stage["inputs"][-1] == {"node": "x_d", "gain": pytest.approx(1 / (1e6 * 1e-7))}


def test_same_plan_gives_same_text(plan):
    assert plan_text(plan_data(plan)) == plan_text(plan_data(plan))
