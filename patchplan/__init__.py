"""patchplan: from a differential equation to an op-amp integrator circuit that obeys it.

>>> import patchplan
>>> problem = patchplan.read_problem("equations/oscillator.toml")  # doctest: +SKIP
>>> plan = patchplan.plan(problem)  # doctest: +SKIP
>>> plan.verdict.verdict  # doctest: +SKIP
'follows'
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from patchplan.version import __version__

if TYPE_CHECKING:
    from patchplan.builds import options as options
    from patchplan.builds import pick as pick
    from patchplan.check.records import Verdict as Verdict
    from patchplan.circuit.records import Circuit as Circuit
    from patchplan.compare.records import Axes as Axes
    from patchplan.compare.records import Comparison as Comparison
    from patchplan.compare.records import Option as Option
    from patchplan.compare.records import Wish as Wish
    from patchplan.equation.problem import Problem as Problem
    from patchplan.equation.reader import read_problem as read_problem
    from patchplan.equation.system import System as System
    from patchplan.errors import CannotBuild as CannotBuild
    from patchplan.errors import FolderRefused as FolderRefused
    from patchplan.errors import PatchplanError as PatchplanError
    from patchplan.errors import ProblemFaults as ProblemFaults
    from patchplan.form.records import Form as Form
    from patchplan.patch.records import Patch as Patch
    from patchplan.pipeline import Choices as Choices
    from patchplan.pipeline import plan as plan
    from patchplan.pipeline import plan_with as plan_with
    from patchplan.report.records import Picked as Picked
    from patchplan.report.records import Plan as Plan
    from patchplan.report.write import write_plan as write_plan
    from patchplan.sizing.records import Sizing as Sizing

#: Public name -> module that holds it; loaded on first use, so that the command line starts without numpy.
_HOME = {
    "read_problem": "equation.reader",
    "plan": "pipeline",
    "plan_with": "pipeline",
    "Choices": "pipeline",
    "options": "builds",
    "pick": "builds",
    "write_plan": "report.write",
    "Plan": "report.records",
    "Picked": "report.records",
    "Axes": "compare.records",
    "Comparison": "compare.records",
    "Option": "compare.records",
    "Wish": "compare.records",
    "Problem": "equation.problem",
    "System": "equation.system",
    "Form": "form.records",
    "Patch": "patch.records",
    "Sizing": "sizing.records",
    "Circuit": "circuit.records",
    "Verdict": "check.records",
    "PatchplanError": "errors",
    "ProblemFaults": "errors",
    "FolderRefused": "errors",
    "CannotBuild": "errors",
}

__all__ = ["__version__", *_HOME]


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'patchplan' has no attribute {name!r}")
    return getattr(import_module(f"patchplan.{_HOME[name]}"), name)
