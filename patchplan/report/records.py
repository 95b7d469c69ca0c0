"""A whole plan: every record of the straight run, kept together."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from patchplan.check.records import Verdict
from patchplan.circuit.records import Circuit
from patchplan.equation.problem import Problem
from patchplan.equation.system import System
from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.ranges import Ranges
from patchplan.reach.records import Reach
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, Target


@dataclass(frozen=True)
class Plan:
    """Everything found on the way from the problem to the verdict.

    ``circuit`` is None where the plan is not buildable; ``verdict`` then says so. ``choices`` names the free decisions
    taken, for the record.
    """

    problem: Problem
    system: System
    reach: Reach
    form: Form
    patch: Patch
    ranges: Ranges
    sensitivity: Sensitivity
    target: Target
    sizing: Sizing
    circuit: Circuit | None
    verdict: Verdict
    choices: Mapping[str, Any] = field(default_factory=dict)
    warnings: tuple[str, ...] = ()
