"""plan.json and the folder of plans that the planner made."""

from __future__ import annotations

import json

import jsonschema
import numpy as np
import pytest

from patchplan.check.simulate import simulate
from patchplan.check.start import hold_state
from patchplan.report.pictures import pictures
from patchplan.report.plan_json import plan_data, plan_text, rebuild
from patchplan.report.write import plan_folder
from tests.report.test_plan_json import SCHEMA

NAMES = ("oscillator", "lorenz", "motor_speed_loop", "tank_level", "integrator")


@pytest.fixture(params=NAMES)
def plan(request, plans):
    return plans.of(request.param)


@pytest.fixture
def data(plan):
    return json.loads(plan_text(plan_data(plan, ["plan.json"])))


def test_plan_holds_to_the_schema(data):
    jsonschema.validate(data, SCHEMA)
    assert data["signals"]
    assert data["parts"]


def test_speed_limits_and_curve_of_plan_json(plan, data):
    window, curve = data["time_scale_window"], data["speed_curve"]
    for end, edge, text in zip(("fast", "slow"), window, data["time_scale_limits"], strict=True):
        first = next(row for row in data["speed_limits"] if row["end"] == end)
        assert (first["time_scale"], first["text"]) == (pytest.approx(edge), text)
        assert first["value"] > 0
    points = len(curve["time_scales"])
    assert points > 5
    for shares in (*curve["error_parts"].values(), *curve["spread_parts"].values(), curve["error_percent"]):
        assert len(shares) == points
    assert curve["real_time"]["reason"].startswith("Real time ")


def test_the_curve_is_drawn(plan):
    drawn = pictures(plan)["speed.svg"]
    assert "error [% of peak]" in drawn
    assert "this plan" in drawn
    assert "real time" in drawn


def test_circuit_that_came_back_starts_where_the_plan_starts(plan, data):
    patch, _, circuit = rebuild(data["records"])
    assert str(patch) == str(plan.patch)
    assert str(circuit) == str(plan.circuit)
    waveforms = plan.reach.reference.waveforms
    again, first = hold_state(circuit, waveforms), hold_state(plan.circuit, waveforms)
    assert again == pytest.approx(first, abs=1e-5)


def test_gains_and_scales_are_the_coefficients_of_the_form(plan, data):
    """Every wire of plan.json, turned back into problem units, is the coefficient that the Patch wants."""
    scale = {row["node"]: row["sign"] * row["volts_per_unit"] for row in data["signals"]}
    stages = {stage.name: stage for stage in plan.patch.stages}
    seen = 0
    for row in data["stages"]:
        stage = stages[row["name"]]
        if row["kind"] == "multiplier":
            one, two = row["inputs"]
            product = one["gain"] * scale[one["node"]] * scale[two["node"]] / scale[row["output"]]
            assert product == pytest.approx(1.0, rel=1e-6)
        if row["kind"] not in ("integrator", "summer", "inverter") or stage.bipolar:
            continue
        knob = float(plan.patch.knobs[stage.knob].value) if stage.knob else 1.0
        speed = data["time_scale"] if row["kind"] == "integrator" else 1.0
        for wire, entry in zip(stage.wires, row["inputs"], strict=False):
            realised = -entry["gain"] * scale[entry["node"]] / scale[row["output"]] * speed / knob
            # Fitting spreads a few percent over scale factors and speed; a wrong sign or scale is far off.
            assert realised == pytest.approx(float(wire.coefficient), rel=0.12), (row["name"], entry)
            seen += 1
    assert seen


def test_waveforms_give_the_watched_signal_back_from_volts(plan):
    content = plan_folder(plan, pictures=False)["waveforms.csv"].decode().splitlines()
    header = content[0].split(",")
    table = dict(zip(header, np.loadtxt(content[1:], delimiter=",").T, strict=True))
    for signal, node in plan.circuit.watched.items():
        meaning = plan.circuit.nodes[node]
        units = (table[f"v({node})"] - meaning.offset_volts) / (meaning.sign * meaning.volts_per_unit)
        peak = np.abs(units).max()
        np.testing.assert_allclose(table[f"{signal} circuit"], units, atol=0.005 * peak)


def test_gains_of_the_stages_are_what_the_board_does(plan, data):
    """v' = -sum(gain*v), v = -sum(gain*v) and v = gain*v1*v2 on the simulated board, to 0.5 % of the largest term.

    Finite gain and bandwidth, which no gain of plan.json counts, take less than that.
    """
    run = simulate(
        plan.circuit, times=np.linspace(0, plan.circuit.duration, 20001), waveforms=plan.reach.reference.waveforms
    )
    seen = 0
    for row in data["stages"]:
        if not row["inputs"]:
            continue
        out, volts = run.of(row["output"]), [run.of(i["node"]) for i in row["inputs"]]
        terms = [-i["gain"] * v for i, v in zip(row["inputs"], volts, strict=True)]
        if row["kind"] == "multiplier":
            terms = [row["inputs"][0]["gain"] * volts[0] * volts[1]]
        wanted = np.gradient(out, run.times) if row["kind"] == "integrator" else out
        # Rows where an output or a source jumps are few, and mean nothing to a difference quotient.
        off = np.quantile(np.abs(np.sum(terms, axis=0) - wanted), 0.99)
        assert off <= 0.005 * np.abs(terms).max(), row
        seen += 1
    assert seen


def test_same_plan_gives_the_same_folder(plan):
    assert plan_folder(plan) == plan_folder(plan)
