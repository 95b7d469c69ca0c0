"""Decisions of the straight run that no single room can show."""

from __future__ import annotations

import pytest

from patchplan.check.start import hold_state
from patchplan.equation.reader import read_problem
from patchplan.pipeline import Choices, plan, plan_with
from patchplan.report.write import write_plan

DECAY = """title = "decay"
equations = ["x' = -x"]
duration = 5
[start]
x = 1
"""


def test_a_free_run_says_that_start_values_are_not_set():
    found = plan_with(read_problem(DECAY + '[build]\nrun = "free"\n'), Choices())
    assert any("A free run sets no start values" in w for w in found.warnings)
    assert not any("A free run" in w for w in plan_with(read_problem(DECAY), Choices()).warnings)


def test_offsets_are_kept_only_where_they_pay():
    """DETEST B2 (Hull et al. 1972): y3 swings from 0.8 to 1, but what spreads it is no offset voltage."""
    chain = """title = "B2"
equations = ["y1' = -y1 + y2", "y2' = y1 - 2*y2 + y3", "y3' = y2 - y3"]
duration = 20
[start]
y1 = 2
y2 = 0
y3 = 1
"""
    assert not plan(read_problem(chain)).form.offsets


def test_the_same_problem_gives_the_same_plan():
    one, other = plan(read_problem(DECAY)), plan(read_problem(DECAY))
    assert str(one.circuit) == str(other.circuit)
    assert str(one.patch) == str(other.patch)
    assert one.verdict.max_error_percent == other.verdict.max_error_percent


def test_no_cause_of_a_budget_outgrows_a_small_error():
    """A slow slew rate beside a fast bandwidth once made the board without bandwidth limit chatter."""
    part = """[build]
op_amp = "my_amp"
[part.my_amp]
like = "TL07x"
kind = "op amp"
gain = 1e5
slew = 1e6
"""
    swing = 'title = "swing"\nequations = ["x\'\' = -4*x - 0.5*x\'"]\nduration = 8\n[start]\nx = 1\n"x\'" = 0\n'
    verdict = plan_with(read_problem(swing + part), Choices()).verdict
    assert verdict.max_error_percent < 0.1
    assert max(c.error_percent for c in verdict.budget) < 0.2


OSCILLATOR = """title = "swing"
equations = ["x'' = -x"]
duration = 8
[start]
x = 1
"x'" = 0
"""


def test_overload_at_a_terminal_asks_for_fewer_volts():
    from patchplan.report.words import remedies

    found = plan(read_problem(OSCILLATOR + "[terminals]\nx = { volts_per_unit = 30 }\n"))
    assert found.verdict.verdict == "overload"
    assert remedies(found)[0] == "Ask for fewer volts per unit at the terminal of x."
    # 30 V are asked for at the start: the output stands at its swing of 12 V, a soft edge of slew/K = 0.69 V beyond it.
    assert found.circuit is not None
    assert max(abs(v) for v in hold_state(found.circuit).values()) < 12.75


def test_a_signal_that_jumps_is_named():
    step = """title = "step"
equations = ["x' = -x + u"]
duration = 8
watch = ["x'"]
[start]
x = 0
[inputs]
u = "step(t - 1)"
"""
    assert any("x' jumps, which no board can" in w for w in plan(read_problem(step)).verdict.warnings)


STILL = 'title = "still"\nequations = ["x\'\' = -x"]\nduration = 8\n[start]\nx = 0\n"x\'" = 0\n'
SUMMER = 'title = "sum"\nequations = ["y = 2*u"]\nduration = 8\n[inputs]\nu = "sin(t)"\n'


@pytest.mark.parametrize("text", [STILL, SUMMER], ids=["nothing moves", "no integrator"])
def test_boards_without_motion_or_integrators_are_written(text, tmp_path):
    found = plan(read_problem(text))
    assert found.verdict.verdict == "follows"
    assert "circuit.cir" in write_plan(found, tmp_path / "plan", pictures=False)


COMPETING = """title = "Three species that compete"
equations = [
  "a' = a*(1 - a - 1.5*b - 0.5*c)", "b' = b*(1 - 0.5*a - b - 1.5*c)", "c' = c*(1 - 1.5*a - 0.5*b - c)",
]
duration = 12
start = { a = 0.6, b = 0.3, c = 0.2 }
"""


def test_a_factored_form_is_planned_to_the_end_with_half_the_multipliers():
    """Expanded there are six products; as factors of three sums there is one for each species."""
    problem = read_problem(COMPETING)
    found = plan(problem)
    expanded = plan_with(problem, Choices(factoring=False))
    assert found.verdict.verdict == "follows"
    assert found.patch.counts()["multiplier"] == 3
    assert len(found.patch.factors) == 3
    assert expanded.patch.counts()["multiplier"] == 6
    assert not expanded.patch.factors


def test_a_watched_sum_is_squared_and_multiplied_without_a_summer_of_its_own(plans):
    """Expanded there are five products, of which load^2 and w*load remain."""
    found = plans.of("factored")
    assert found.verdict.verdict == "follows"
    assert found.patch.counts()["multiplier"] == 2
    assert found.patch.factors == ("load",)
    assert sum(s.signal == "load" for s in found.patch.stages if s.kind == "summer") == 1
