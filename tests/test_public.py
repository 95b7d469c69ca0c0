"""The package from Python: what `import patchplan` gives."""

from __future__ import annotations

import dataclasses
import subprocess
import sys

import pytest

import patchplan

TEXT = """title = "decay"
equations = ["x' = -2*x"]
duration = 3
[start]
x = 1
"""


def test_problem_to_verdict_and_folder(tmp_path):
    problem = patchplan.read_problem(TEXT)
    plan = patchplan.plan(problem)
    assert plan.verdict.verdict == "follows"
    assert isinstance(plan, patchplan.Plan)
    assert isinstance(plan.circuit, patchplan.Circuit)
    assert "plan.json" in patchplan.write_plan(plan, tmp_path / "decay", pictures=False)


def test_straight_run_takes_its_choices():
    plan = patchplan.plan_with(patchplan.read_problem(TEXT), patchplan.Choices(speed=100.0, think="low"))
    assert plan.sizing.time_scale == pytest.approx(0.01)
    assert plan.choices["think"] == "low"


@pytest.mark.parametrize("name", [n for n in patchplan.__all__ if n != "__version__"])
def test_public_names_resolve_and_are_documented(name):
    value = getattr(patchplan, name)
    assert value.__doc__
    if dataclasses.is_dataclass(value):
        assert value.__dataclass_params__.frozen


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="no attribute 'solve'"):
        _ = patchplan.solve


def test_import_loads_nothing_heavy():
    heavy = ("numpy", "scipy", "sympy", "matplotlib", "rich")
    code = f"import sys, patchplan; print([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
