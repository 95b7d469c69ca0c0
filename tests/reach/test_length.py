"""Runs that would never end are refused before they are solved."""

from __future__ import annotations

import pytest

from patchplan.equation.explicit import build_system
from patchplan.equation.problem import Build
from patchplan.equation.reader import read_problem
from patchplan.errors import ProblemFaults
from patchplan.reach.reference import find_reach

LAG = """title = "lag"
equations = ["x' = -x + u"]
duration = 3
[start]
x = 1
[inputs]
u = "{}"
"""
SWING = """title = "swing"
equations = ["x'' = -x"]
duration = {}
[start]
x = 1
"x'" = 0
"""


@pytest.mark.parametrize(
    ("text", "found"),
    [
        (LAG.format("2 + sin(1e9*t)"), "4.77e+08 cycles of sin(1000000000*t)"),
        (SWING.format("1e6"), "1.59e+05 cycles of the system's own fastest mode"),
    ],
)
def test_too_many_cycles_are_a_fault_at_the_duration(text, found):
    with pytest.raises(ProblemFaults) as caught:
        find_reach(build_system(read_problem(text)), {}, Build())
    fault = caught.value.faults[0]
    assert found in fault.found
    assert fault.key == "duration"


def test_growth_beyond_all_bounds_is_a_fault_and_no_overflow():
    text = 'title = "grow"\nequations = ["x\' = x"]\nduration = 500\n[start]\nx = 1\n'
    with pytest.raises(ProblemFaults, match="grows without bound at t = 138"):
        find_reach(build_system(read_problem(text)), {}, Build())
