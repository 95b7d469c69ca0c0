"""Boards whose gains are networks of three resistors: hold, run and spread, from parts and nets alone."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import patchplan
from patchplan.check.figures import signal_of
from patchplan.check.simulate import simulate
from patchplan.report.records import Plan
from tests.check.test_spread import assert_spread_is_that_of_drawn_boards

#: Time constants of 40 and 60 s: 40 to 60 Mohm at the largest capacitor of 1 uF.
PROBLEM = """
title = "Two rooms that cool"
equations = ["a' = (b - a)/40", "b' = (a - b)/60 - b/50"]
duration = 150.0
watch = ["a", "b"]
[start]
a = 20.0
b = -5.0
[build]
speed = "real time"
"""


@pytest.fixture(scope="module")
def plan(tmp_path_factory: pytest.TempPathFactory) -> Plan:
    file = Path(tmp_path_factory.mktemp("networks")) / "rooms.toml"
    file.write_text(PROBLEM, encoding="utf-8")
    return patchplan.plan(patchplan.read_problem(file))


def test_every_leg_is_a_network_and_the_board_follows(plan: Plan) -> None:
    legs = [
        leg for stage in plan.patch.stages if stage.kind == "integrator" for leg in plan.sizing.stages[stage.name].legs
    ]
    assert legs
    assert all(len(leg.resistors) == 3 for leg in legs)
    assert plan.verdict.verdict == "follows"
    # Closed form: matrix exponential of the equations as written.
    from scipy.linalg import expm

    circuit = plan.circuit
    assert circuit is not None
    times = np.linspace(0.0, 150.0, 16)
    exact = np.array(
        [expm(np.array([[-1 / 40, 1 / 40], [1 / 60, -1 / 60 - 1 / 50]]) * t) @ (20.0, -5.0) for t in times]
    )
    run = simulate(circuit, times=times)
    found = np.array([signal_of(circuit, run, circuit.watched[name]) for name in ("a", "b")]).T
    assert found == pytest.approx(exact, abs=0.01 * 20.0)


def test_start_values_stand_in_hold(plan: Plan) -> None:
    """The networks stay between their sources and the bus, off the summing node: nothing pulls the start value."""
    assert plan.circuit is not None
    run = simulate(plan.circuit, times=np.array([0.0, plan.circuit.duration]))
    for name, wanted in (("a", 20.0), ("b", -5.0)):
        start = signal_of(plan.circuit, run, plan.circuit.watched[name])[0]
        assert start == pytest.approx(wanted, rel=5e-3)


@pytest.mark.parametrize("offsets", [False, True], ids=["tolerances", "offsets"])
def test_spread_counts_all_three_resistors_and_what_the_summing_node_sees(plan: Plan, *, offsets: bool) -> None:
    assert_spread_is_that_of_drawn_boards(plan, offsets=offsets)
