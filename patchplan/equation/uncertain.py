"""The System with every uncertain parameter of the plant left open, as if each had a knob."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from fractions import Fraction

from patchplan.equation.explicit import build_system
from patchplan.equation.problem import Parameter, Problem
from patchplan.equation.system import System
from patchplan.errors import ProblemFaults


def uncertain_system(problem: Problem, system: System) -> tuple[System | None, tuple[str, ...]]:
    """The System in which parameters with a tolerance are adjustable over it, and those for which that cannot be.

    Parameters
    ----------
    system
        The problem's System: states, sources and start values must come out the same.

    Returns
    -------
    system, left_out
        None where no parameter has a tolerance that can be followed.
    """
    wished = [p for p in problem.parameters.values() if p.tolerance and not p.adjustable and p.value]
    if not wished:
        return None, ()
    found = _opened(problem, system, wished)
    if found is not None:
        return found, ()
    kept: list[Parameter] = []
    for parameter in wished:
        trial = _opened(problem, system, [*kept, parameter])
        if trial is not None:
            found = trial
            kept.append(parameter)
    return found, tuple(p.name for p in wished if p not in kept)


def _opened(problem: Problem, system: System, parameters: Iterable[Parameter]) -> System | None:
    opened = dict(problem.parameters)
    for p in parameters:
        half = abs(p.value) * Fraction(p.tolerance).limit_denominator(10**9)
        opened[p.name] = replace(p, low=p.value - half, high=p.value + half)
    try:
        made = build_system(replace(problem, parameters=opened))
    except ProblemFaults:
        return None
    return made if (made.states, made.sources) == (system.states, system.sources) else None
