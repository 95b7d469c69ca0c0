"""The worst waveforms of inputs known only by bounds: written out, run, and attained outside the tool as well."""

from __future__ import annotations

import csv
import io
import json

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from patchplan.check.figures import node_peaks
from patchplan.check.simulate import simulate
from patchplan.equation.explicit import build_system
from patchplan.equation.reader import read_problem
from patchplan.reach.reference import find_reach
from patchplan.report.board import board_of
from patchplan.report.plan_json import plan_data
from patchplan.report.summary import summary
from patchplan.report.worst import worst_files
from tests.circuit.spice import run_ngspice

NAME = "isolation_table"


@pytest.fixture(scope="module")
def plan(plans):
    return plans.of(NAME)


def columns(text):
    rows = list(csv.reader(io.StringIO(text)))
    return rows[0], np.array(rows[1:], float).T


def test_the_recording_attains_the_peak_in_scipy(plan):
    # The plant by hand from the problem's text: m x'' = -k x - c x' - m floor.
    m, k, c = 250.0, 61.7e3, 1963.0
    outputs = {"x": np.array([1.0, 0.0]), "force": np.array([k, c])}
    for case in plan.reach.worst:
        (_, name), (times, floor) = columns(worst_files(plan)[f"worst_{case.signal}.csv"])
        assert name == "floor"
        assert np.abs(floor).max() <= 0.3
        x, heights = np.zeros(2), [0.0]
        for begin, end, a, b in zip(times, times[1:], floor, floor[1:], strict=False):
            slope = (b - a) / (end - begin)
            run = solve_ivp(
                lambda t, x, u=(begin, a, slope): [x[1], -(k * x[0] + c * x[1]) / m - u[1] - u[2] * (t - u[0])],
                (begin, end), x, rtol=1e-10, atol=1e-15, method="DOP853", dense_output=True,
            )  # fmt: skip
            heights.append(np.abs(outputs[case.signal] @ run.sol(np.linspace(begin, end, 50))).max())
            x = run.y[:, -1]
        bound = plan.reach.ranges[case.signal].peak
        assert max(heights) == pytest.approx(bound, rel=1e-6)
        assert max(heights) <= bound


def test_a_problem_that_names_the_recording_has_the_same_peak(plan, tmp_path):
    text = plan.problem.text.replace(
        "floor = { within = [-0.3, 0.3] }", 'floor = { file = "worst_force.csv", time = "t", value = "floor" }'
    )
    (tmp_path / "problem.toml").write_text(text, encoding="utf-8")
    (tmp_path / "worst_force.csv").write_text(worst_files(plan)["worst_force.csv"], encoding="utf-8")
    problem = read_problem(tmp_path / "problem.toml")
    again = find_reach(build_system(problem), {}, problem.build).ranges["force"]
    assert again.known_by == "proved"
    assert again.peak == pytest.approx(plan.reach.ranges["force"].peak, rel=1e-7)


def test_every_worst_case_runs_on_the_board(plan):
    assert {case.signal for case in plan.reach.worst} == {"x", "force"}
    first, second = plan.reach.worst
    assert plan.reach.reference is first.reference
    peaks = {peak.node: peak for peak in plan.verdict.nodes}
    for case in plan.reach.worst:
        node = plan.circuit.nodes[plan.patch.watched[case.signal]]
        # What the proof allows is reached on the simulated board within what the board errs.
        assert peaks[node.node].peak_volts == pytest.approx(abs(case.value) * node.volts_per_unit, rel=2e-3)
    times = second.reference.times * plan.circuit.time_scale
    alone = node_peaks(plan.circuit, simulate(plan.circuit, times=times, waveforms=second.reference.waveforms))
    higher = [p for p in plan.verdict.nodes if p.during == second.signal]
    assert higher
    assert {p.node: p.peak_volts for p in alone}.items() >= {p.node: p.peak_volts for p in higher}.items()


def test_the_netlist_holds_the_worst_of_all(plan):
    uses = {}
    for case in plan.reach.worst:
        node = plan.circuit.nodes[plan.patch.watched[case.signal]]
        uses[case.signal] = abs(case.value) * node.volts_per_unit / node.limit_volts
    chosen = max(uses, key=uses.__getitem__)
    node = plan.circuit.nodes[plan.patch.watched[chosen]]
    volts, _ = run_ngspice(board_of(plan)[1], seconds=100.0)
    found = np.abs(volts[node.node]).max() / node.volts_per_unit
    assert found == pytest.approx(plan.reach.ranges[chosen].peak, rel=0.01)


def test_plan_json_lists_the_worst_inputs(plan):
    data = json.loads(json.dumps(plan_data(plan)))
    listed = {row["signal"]: row for row in data["worst_inputs"]}
    assert set(listed) == {"x", "force"}
    assert listed["force"]["file"] in worst_files(plan)
    assert listed["force"]["inputs"] == ["floor"]
    assert abs(listed["force"]["value_units"]) == pytest.approx(plan.reach.ranges["force"].peak, rel=1e-8)
    assert any(
        "worst case of each of" in warning and "circuit.cir holds that of" in warning for warning in data["warnings"]
    )


def test_the_terminal_says_for_what_the_ranges_hold(plan):
    case = plan.reach.worst[0]
    wanted = (
        "Ranges hold for every waveform of floor within bounds, by peak gains; "
        f"{case.signal} goes to {case.value:.4g} at t = {case.time:.4g}."
    )
    assert wanted in " ".join(line.strip() for line in summary(plan).splitlines())
