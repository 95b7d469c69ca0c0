"""Slow plants at the speed of the plant, with film capacitors of at most 4.7 uF."""

from __future__ import annotations

from pathlib import Path

import pytest

from patchplan.equation.reader import read_problem
from patchplan.pipeline import plan as make_plan
from patchplan.report.records import Plan
from tests.cases.convert import problem_text
from tests.plans import CASES, EQUATIONS, Plans

BUILD = """
[build]
speed = "real time"
resistors = "E96"
op_amp = "OPA4140"
resistor_tolerance = "0.1%"
capacitor_tolerance = "1%"
capacitor_limits = ["1n", "4.7u"]
"""
#: Largest nominal error and spread of boards [% of peak], with room for other values; measured figures beside them.
#: The reference case thermal_rc_chain_10 is not among them: single resistors at a given speed leave some 1 % in each of
#: its twenty loops, to which its far end is more sensitive than to anything that real time costs.
SLOW = {
    "dc_motor_speed_PI": (1.0, 1.5),  # 0.18 and 0.69
    "thermal_chain": (0.5, 3.0),  # 0.18 and 1.6: minutes, three networks a stage
}


def slow_plan(name: str, folder: Path) -> Plan:
    file = folder / f"{name}.toml"
    text = problem_text(CASES[name]) if name in CASES else (EQUATIONS / f"{name}.toml").read_text(encoding="utf-8")
    file.write_text(text + BUILD, encoding="utf-8")
    return make_plan(read_problem(file))


@pytest.mark.parametrize("name", SLOW)
def test_follows_in_real_time(name: str, tmp_path: Path) -> None:
    plan = slow_plan(name, tmp_path)
    check(plan, *SLOW[name])
    if name == "thermal_chain":
        # A piece of the bar has a minute: 13 Mohm at 4.7 uF.
        assert networks(plan) == sum(len(s.wires) for s in plan.patch.stages if s.kind == "integrator")


def test_the_tank_follows_in_real_time(plans: Plans) -> None:
    """Two hours of circuit time; 0.18 % and 0.45 % measured."""
    plan = plans.of("tank_real_time")
    check(plan, 0.5, 1.5)
    assert networks(plan) == 10


def check(plan: Plan, error: float, spread: float) -> None:
    assert plan.sizing.time_scale == pytest.approx(float(plan.system.time_unit_seconds))
    assert plan.verdict.verdict == "follows", plan.warnings
    assert plan.verdict.max_error_percent < error
    assert plan.verdict.spread_percent < spread
    assert max(s.capacitor for s in plan.sizing.stages.values()) <= 4.7e-6


def networks(plan: Plan) -> int:
    return sum(len(leg.resistors) == 3 for stage in plan.sizing.stages.values() for leg in stage.legs)
