"""A summer in front of an integrator whose gains no resistors span."""

from __future__ import annotations

from dataclasses import replace

import pytest

from patchplan.equation.reader import read_problem
from patchplan.pipeline import Choices, plan, plan_with
from patchplan.sizing.crowding import crowding

# y has gone before z has come, so that their product swings over some 3 % of its limit and x asks for 2300 times the
# gain of its own feedback, whatever the scale factors.
CROSSING = """title = "Dose of a crossing pair"
equations = ["x' = -0.02*x + 20*y*z", "y' = -8*y", "z' = 1 - z"]
duration = 5.0
watch = ["x"]
[start]
x = 0.0
y = 1.0
z = 0.0
[build]
resistor_limits = ["5k", "100k"]
"""


def test_a_board_that_resistors_cannot_span_gets_a_summer():
    problem = read_problem(CROSSING)
    without = plan_with(problem, Choices())
    found = plan(problem)
    assert without.verdict.verdict == "not_buildable"
    assert "a gain" in without.sizing.faults[0]
    assert crowding(without.patch, without.sizing, without.target) == ("x<-y*z",) == found.choices["summers"]
    assert found.verdict.verdict == "follows"
    assert found.patch.counts()["summer"] == 1


@pytest.mark.parametrize("least", ["3k", "5k", "10k"])
def test_a_network_of_three_spans_what_single_resistors_do_not(least: str) -> None:
    """Up to 1M the network for x beside a resistor for y*z reaches gains 1000 times those of single resistors."""
    problem = read_problem(CROSSING.replace('"5k", "100k"', f'"{least}", "1M"'))
    found = plan_with(problem, Choices())
    assert not found.sizing.faults
    assert max(abs(c.error_percent) for c in found.sizing.coefficients) < 0.2
    assert len(found.sizing.stages["I1"].legs[0].resistors) == 3


def test_no_summer_where_values_are_in_reach():
    tame = CROSSING.replace('"5k", "100k"', '"2k", "1M"').replace("-0.02*x", "-x")
    found = plan_with(read_problem(tame), Choices())
    assert not found.sizing.faults
    assert crowding(found.patch, found.sizing, found.target) == ()
    wrong = tuple(replace(c, realised=0.0) for c in found.sizing.coefficients if c.at == "x<-x")
    off = replace(found.sizing, coefficients=wrong)
    assert crowding(found.patch, off, found.target) == ()
    assert crowding(found.patch, off, replace(found.target, resistors=(1e4, 2e4))) == ("x<-y*z",)
