"""A whole plan: every record of the straight run, kept together."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from patchplan.check.records import Verdict
from patchplan.circuit.records import Circuit
from patchplan.compare.records import Option, SpeedCurve
from patchplan.equation.problem import Problem
from patchplan.equation.system import System
from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.ranges import Ranges
from patchplan.reach.records import Reach
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, Target


@dataclass(frozen=True, slots=True)
class Considered:
    """One form that a linear block could take.

    Attributes
    ----------
    block, order, form
        Output of the block, its number of states, and the form.
    stages, wires
        Of the whole board in that form; 0 where the block can't take it.
    tolerance_percent
        Spread of the watched signals by the tolerances of resistors and capacitors, before values are chosen, largest
        over time [% of the error base]; None where the block can't take the form.
    error_percent, spread_percent
        Nominal error and spread of the board that was planned in that form, None where none was.
    reason
        Why the block can't take the form, "" where it can.
    """

    block: str
    order: int
    form: str
    stages: int = 0
    wires: int = 0
    tolerance_percent: float | None = None
    error_percent: float | None = None
    spread_percent: float | None = None
    chosen: bool = False
    reason: str = ""


@dataclass(frozen=True)
class Plan:
    """Everything found on the way from the problem to the verdict.

    ``circuit`` is None where the plan is not buildable; ``verdict`` then says so. ``choices`` names the free decisions
    taken, for the record; ``considered`` the forms of linear blocks that were weighed; ``speed_curve`` is made for the
    plan that is taken in the end only.
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
    considered: tuple[Considered, ...] = ()
    speed_curve: SpeedCurve | None = None


@dataclass(frozen=True)
class Picked:
    """The cheapest option whose plan, checked in full, meets a wish.

    Attributes
    ----------
    option, plan
        None where there is no such option among those checked.
    refuted
        Options that were predicted to meet the wish and whose plans, checked in full, do not.
    """

    option: Option | None
    plan: Plan | None
    refuted: tuple[tuple[Option, Plan], ...] = ()
