"""The netlist's time step, held against the check in a simulator from outside (Debian ngspice)."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from patchplan.equation.reader import read_problem
from patchplan.pipeline import plan as make_plan
from patchplan.report.board import board_of
from tests.circuit.spice import run_ngspice

# A slow pass over the saddle at 0: lateness moves it by five times its own phase.
DUFFING = """
title = "Duffing over its saddle"
equations = ["x'' = -0.004*x' + 3.68e-05*x - 0.0001*x^3 + 3e-05*u1", "out = 1.45*x + 98.8*x'"]
duration = 1790
watch = ["x", "out"]
start = { x = -1.01, "x'" = -0.0123 }
inputs = { u1 = "0.984*sawtooth(t, 1.66e+03)" }
build = { resistors = "E12", speed = 49100.0 }
"""
# Swings around 1, so that its rate is far more than its slope over its peak.
PREDATORS = """
title = "Lotka-Volterra near its centre"
equations = ["x' = 1.31*x - 1.31*x*y", "y' = -1.18*y + 1.18*x*y"]
duration = 17.7
watch = ["y"]
start = { x = 1.35, y = 0.977 }
build = { supply = 12.0, op_amp = "OPA2277", resistors = "E12", run = "repeat", speed = 362.0 }
"""


@pytest.mark.parametrize(("text", "node"), [(DUFFING, "x"), (PREDATORS, "x_s")])
def test_the_step_is_small_enough(tmp_path: Path, text: str, node: str) -> None:
    (tmp_path / "problem.toml").write_text(text, encoding="utf-8")
    plan = make_plan(read_problem(tmp_path / "problem.toml"))
    assert plan.circuit is not None
    volts, seconds = run_ngspice(board_of(plan)[1])
    own = plan.verdict.volts[node]
    apart = np.abs(volts[node] - np.interp(seconds, plan.verdict.times, own)).max()
    assert apart <= 0.005 * np.abs(own).max()
