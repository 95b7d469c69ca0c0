"""Many builds of one problem: the grid, the predictions against full plans, the pick."""

from __future__ import annotations

from dataclasses import replace

import pytest

from patchplan.builds import options, pick
from patchplan.compare.records import Axes, Comparison, Wish
from patchplan.equation.problem import Problem
from patchplan.equation.reader import read_problem
from patchplan.errors import ProblemFaults
from patchplan.pipeline import Choices, plan, plan_with
from tests.plans import EQUATIONS

FILTER = """title = "filter"
equations = ["x'' = -x - 0.5*x' + u"]
duration = 12
watch = ["x"]
[start]
x = 0
"x'" = 0
[inputs]
u = "step(t - 1)"
"""
RAISED = """title = "raised"
equations = ["x' = -(x - 20) + u"]
duration = 6
watch = ["x"]
[start]
x = 20
[inputs]
u = "sin(2*t)"
"""
CYCLE = """title = "van der Pol"
equations = ["x'' = (1 - x^2)*x' - x"]
duration = 8
watch = ["x"]
[start]
x = 2
"x'" = 0
"""


@pytest.fixture(scope="module")
def problem() -> Problem:
    return read_problem(FILTER)


@pytest.fixture(scope="module")
def comparison(problem: Problem) -> Comparison:
    return options(problem)


def test_the_grid_varies_every_axis_and_begins_with_the_files_own_build(problem, comparison):
    builds = [o.build for o in comparison.options]
    assert len(builds) == len(set(builds)) == 30
    assert builds[0] == problem.build
    for axis in ("op_amp", "resistors", "resistor_tolerance", "capacitor_tolerance", "supply", "speed"):
        assert len({getattr(b, axis) for b in builds}) > 1, axis
    assert not any(o.fault for o in comparison.options)


def test_the_grid_of_a_raised_signal_has_both_forms():
    found = options(read_problem(RAISED))
    assert {o.build.offsets for o in found.options} == {True, False}
    assert len(found.options) <= 30


def test_a_build_has_the_same_figures_whatever_it_is_compared_with(problem, comparison):
    few = options(problem, axes=Axes(op_amps=("OPA2277", "TL07x"))).options
    assert [replace(o, best=False) for o in reversed(few)] == [replace(o, best=False) for o in comparison.options[:2]]


@pytest.mark.parametrize("text", [FILTER, CYCLE, str(EQUATIONS / "seat_suspension.toml")])
def test_predictions_hold_against_full_plans_and_rank_alike(text):
    """Of a few builds far apart, within a factor 1.5 where an error is more than what linear responses leave out."""
    problem = read_problem(text)
    axes = Axes(op_amps=("TL07x", "OPA2277", "LT1365"), series=("E12",), tolerances=((0.01, None),))
    found = options(problem, axes=axes).options
    checked = []
    for option in found:
        verdict = plan_with(replace(problem, build=option.build), Choices(think="low")).verdict
        checked.append(verdict.max_error_percent)
        assert option.spread_percent == pytest.approx(verdict.spread_percent, rel=1e-9)
        assert verdict.max_error_percent / 1.5 - 0.005 <= option.error_percent
        assert option.error_percent <= 1.5 * verdict.max_error_percent + 0.005
    predicted = [o.error_percent for o in found]
    assert predicted.index(max(predicted)) == checked.index(max(checked))
    best = predicted.index(min(predicted))
    assert checked[best] <= 1.1 * min(checked) + 0.005


def test_counts_are_those_of_the_plan(problem, comparison):
    from patchplan.report.words import made_of

    option = comparison.options[0]
    made = made_of(plan_with(problem, Choices(think="low")))
    assert made.endswith(f"; {option.packages} packages, {option.parts} parts.")


def test_a_build_that_no_part_serves_is_a_row_with_its_sentence(problem):
    axes = Axes(op_amps=("TL07x", "MCP6004"), supplies=((-15.0, 15.0), (-2.5, 2.5)))
    found = {(o.build.op_amp, o.build.supply[1]): o for o in options(problem, axes=axes).options}
    assert len(found) == 4
    assert "MCP6004 takes 1.8 V to 6 V" in found["MCP6004", 15.0].fault
    assert "TL07x takes 10 V to 36 V" in found["TL07x", 2.5].fault
    assert found["MCP6004", 2.5].fault == found["TL07x", 15.0].fault == ""
    # The reference follows the supply as it does in a file that states none.
    assert found["MCP6004", 2.5].build.reference == 1.25
    assert [o.best for o in found.values()] == [not o.fault for o in found.values()]


def test_the_pick_is_what_plan_gives_for_the_lines_told(problem, comparison):
    picked = pick(problem, comparison, Wish(0.05))
    assert picked.option is not None
    assert picked.plan is not None
    assert picked.plan.verdict.verdict == "follows"
    assert picked.plan.verdict.max_error_percent <= 0.05
    again = plan(read_problem(picked.plan.problem.text), accept=0.05)
    assert str(again.circuit) == str(picked.plan.circuit)


def test_the_pick_keeps_the_form_of_its_row():
    problem = read_problem(RAISED)
    found = options(problem)
    plainest = Comparison(found.title, tuple(o for o in found.options if o.build.offsets is False))
    picked = pick(problem, plainest, Wish(5.0))
    assert picked.plan is not None
    assert not picked.plan.form.offsets
    assert "offsets = false" in picked.plan.problem.text


def test_a_prediction_too_good_is_refuted_and_the_next_is_tried(problem, comparison):
    flattering = Comparison("", tuple(replace(o, error_percent=0.0) for o in comparison.options[:2]))
    slow = replace(comparison.options[0], build=replace(problem.build, speed=1e-4), error_percent=0.0, packages=0)
    picked = pick(problem, replace(flattering, options=(slow, *flattering.options)), Wish(1.0))
    assert [o for o, _ in picked.refuted] == [slow]
    assert picked.option in flattering.options


def test_nothing_is_planned_where_no_build_meets_the_wish(problem, comparison):
    assert pick(problem, comparison, Wish(1e-9)).refuted == ()


LOW_PASS = """title = "low-pass"
equations = ["y = 1/((s^2 + 0.5*s + 1)*(s + 1)) * u"]
duration = 12
[inputs]
u = "step(t - 1)"
[build]
forms = { NAME = "FORM" }
"""


def test_the_form_that_a_file_asks_for_is_taken():
    found = plan(read_problem(LOW_PASS.replace("NAME", "y").replace("FORM", "cascade")))
    assert dict(found.choices["blocks"]) == {"y": "cascade"}


@pytest.mark.parametrize(("name", "form"), [("z", "cascade"), ("y", "spiral")])
def test_a_form_that_cannot_be_is_refused_with_its_place(name, form):
    with pytest.raises(ProblemFaults) as error:
        options(read_problem(LOW_PASS.replace("NAME", name).replace("FORM", form)))
    assert "problem.toml:7:" in error.value.rendered
    assert "Name the output of a linear block and one of companion, cascade," in error.value.rendered
