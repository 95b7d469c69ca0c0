"""A knob that is nominally 0, at one end of its range."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from patchplan.check.simulate import simulate
from patchplan.equation.reader import read_problem
from patchplan.pipeline import Choices, plan_with

TEXT = """equations = ["x'' = -a*x' - x"]
watch = ["x"]
duration = {duration}
[parameters]
a = {{ value = 0.0, from = {low}, to = {high} }}
[start]
x = 1.0
"x'" = 0.0
"""


@pytest.mark.parametrize(("low", "high", "duration"), [(0.0, 1.0, 10.0), (-1.0, 0.0, 2.0)])
def test_a_knob_that_starts_at_zero_turns_to_its_other_end(low: float, high: float, duration: float) -> None:
    """There x is a damped or growing oscillation, exp(-a*t/2)*(cos(w*t) + a/(2*w)*sin(w*t)), w^2 = 1 - a^2/4."""
    plan = plan_with(read_problem(TEXT.format(low=low, high=high, duration=duration)), Choices(think="low"))
    assert plan.verdict.verdict == "follows"
    circuit = plan.circuit
    assert circuit is not None
    (law,) = circuit.knobs
    assert law.setting == 0.0
    assert min(law.covers) <= low
    assert max(law.covers) >= high
    a = low or high
    setting = np.interp(abs(a), [abs(p[1]) for p in law.points], [p[0] for p in law.points])
    turned = replace(
        circuit, parts=tuple(replace(p, value=float(setting)) if p.ref == law.ref else p for p in circuit.parts)
    )
    run = simulate(turned, times=np.linspace(0.0, circuit.duration, 201))
    node = circuit.nodes[circuit.watched["x"]]
    t, w = run.times / circuit.time_scale, np.sqrt(1 - a * a / 4)
    wanted = np.exp(-a * t / 2) * (np.cos(w * t) + a / (2 * w) * np.sin(w * t))
    # The law's table is read along straight lines, and values are rounded to 0.1 %.
    found = run.of(node.node) / (node.sign * node.volts_per_unit)
    assert found == pytest.approx(wanted, abs=5e-3 * np.abs(wanted).max())
