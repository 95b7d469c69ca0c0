"""Ranges over uncertain and adjustable parameters: what was run, the worst point, and settings that blow up."""

from __future__ import annotations

import json

import numpy as np
import pytest

from patchplan.equation.explicit import build_system
from patchplan.equation.problem import Build
from patchplan.equation.reader import read_problem
from patchplan.equation.uncertain import uncertain_system
from patchplan.errors import ProblemFaults
from patchplan.pipeline import plan
from patchplan.reach.reference import find_reach
from patchplan.report.plan_json import plan_data
from patchplan.report.summary import summary

# From (1, 0) the swing's first undershoot is exp(-pi z / sqrt(1 - z^2)) with z = c / (2 sqrt(k)): deepest where c is
# least and k most.
SWING = """title = "Swing"
equations = ["x'' = -c*x' - k*x"]
duration = 12
[parameters]
c = {{ value = 0.5, {c} }}
k = {{ value = 2.0, {k} }}
[start]
x = 1
"x'" = 0
"""


def undershoot(c: float, k: float) -> float:
    z = c / (2 * np.sqrt(k))
    return float(-np.exp(-np.pi * z / np.sqrt(1 - z * z)))


@pytest.mark.parametrize(
    ("c", "k"),
    [('tolerance = "20%"', 'tolerance = "10%"'), ("from = 0.4, to = 0.6", 'tolerance = "10%"')],
    ids=["uncertain", "mixed"],
)
def test_the_worst_corner_of_a_tolerance_is_in_the_range(c, k):
    found = plan(read_problem(SWING.format(c=c, k=k)))
    deepest, box = undershoot(0.4, 2.2), found.reach.box
    x = found.reach.ranges["x"]
    assert x.known_by == "simulated"
    assert x.low + x.margin == pytest.approx(deepest, rel=1e-4)
    assert set(box.parameters) == {"c", "k"}
    # Nothing was moved but the knobs of the patch: those of the plant's tolerance are none.
    assert set(found.patch.knobs) == ({"c"} if "from" in c else set())
    assert all(set(run.point) == {"c", "k"} for run in found.reach.runs[1:])
    data = json.loads(json.dumps(plan_data(found)))["ranges"]
    assert data["runs"] == data["corners"] + data["sampled"] + data["climbed"] == box.runs
    assert data["corners"] == 4
    rows = {row["name"]: row for row in data["worst_points"]}
    # x starts at 1, further out than any undershoot; x' is fastest where c is least and k most.
    assert rows["x'"]["worst_at"] == pytest.approx({"c": 0.4, "k": 2.2})
    assert f"by {box.runs} runs: all 4 corners" in data["sentence"]
    if "from" not in c:
        assert "c = 0.4, k = 2.2" in data["sentence"]
    assert data["sentence"] in plan_data(found)["notes"]
    lines = summary(found).splitlines()
    assert max(map(len, lines)) <= 80
    assert data["sentence"] in " ".join(line.strip() for line in lines)


def test_a_setting_that_blows_up_is_named():
    text = """title = "Escape"
equations = ["x' = a*x^2 - x"]
duration = 2
[parameters]
a = { value = 0.5, from = 0.1, to = 2.0 }
[start]
x = 1
"""
    # x' = a x^2 - x from 1 escapes at ln(a / (a - 1)) where a > 1: ln 2 at a = 2.
    problem = read_problem(text)
    with pytest.raises(ProblemFaults, match=r"grows without bound at t = 0\.693.* where a = 2\."):
        find_reach(build_system(problem), {}, Build())


def test_a_tolerance_that_blows_up_is_a_warning():
    text = """title = "Near escape"
equations = ["x' = a*x^2 - x"]
duration = 4
[parameters]
a = { value = 0.99, tolerance = "10%" }
[start]
x = 1
"""
    problem = read_problem(text)
    system = build_system(problem)
    wide, left_out = uncertain_system(problem, system)
    assert left_out == ()
    reach = find_reach(system, {}, Build(resistor_tolerance=0, capacitor_tolerance=0), uncertain=wide)
    assert any("Within the tolerance of the parameters" in w and "a = 1.089" in w for w in reach.warnings)


def test_a_tolerance_inside_a_function_of_time_is_told():
    text = """title = "Driven"
equations = ["x' = -k*x + sin(w*t)"]
duration = 4
[parameters]
k = { value = 1.0, tolerance = "10%" }
w = { value = 2.0, tolerance = "10%" }
[start]
x = 0
"""
    problem = read_problem(text)
    wide, left_out = uncertain_system(problem, build_system(problem))
    assert left_out == ("w",)
    assert [p.name for p in wide.adjustable] == ["k"]
    assert any("The tolerance of w is not in the ranges" in w for w in plan(problem).warnings)


def test_bounded_inputs_hold_over_a_tolerance():
    text = SWING.format(c='tolerance = "20%"', k='tolerance = "10%"').replace("- k*x", "- k*x + u")
    text = text.replace("x = 1", "x = 0") + "[inputs]\nu = { within = [-1, 1] }\n"
    problem = read_problem(text)
    system = build_system(problem)
    reach = find_reach(system, {}, Build(), uncertain=uncertain_system(problem, system)[0])
    # Over the whole of time the peak gain is coth(pi z / (2 sqrt(1 - z^2))) / k (Boyd & Barratt 1991, chapter 5); the
    # worst is the least of c with the least of k, and 12 units of time leave less than 1 % of it out.
    z = 0.4 / (2 * np.sqrt(1.8))
    worst = 1 / np.tanh(np.pi * z / (2 * np.sqrt(1 - z * z))) / 1.8
    assert 0.9 * worst < reach.ranges["x"].high < worst
    assert reach.ranges["x"].known_by == "simulated"
    assert {p.name: p.parameters for p in reach.box.worst}["x"] == pytest.approx({"c": 0.4, "k": 1.8})
