"""What each name of a problem is: parameter, input, definition, unknown; and the faults of names."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from difflib import get_close_matches

from patchplan.equation.constants import names_of
from patchplan.equation.formula import fault_at
from patchplan.equation.problem import Equation, Problem
from patchplan.equation.tree import FUNCTIONS, Name
from patchplan.errors import Fault

_VALUES = ("parameters.", "start.", "ranges.", "terminals.")


@dataclass(frozen=True)
class Outline:
    """Equations sorted by what they do.

    Attributes
    ----------
    definitions
        Algebraic signals by name, in file order.
    equations
        Differential equations.
    blocks
        Equations with the Laplace operator.
    unknowns
        Names that carry a prime and are no definition, in order of appearance.
    """

    definitions: dict[str, Equation]
    equations: tuple[Equation, ...]
    blocks: tuple[Equation, ...]
    unknowns: tuple[str, ...]

    @property
    def outputs(self) -> tuple[str, ...]:
        """Names that Laplace blocks give."""
        return tuple(e.left.name for e in self.blocks if isinstance(e.left, Name))


def outline_of(problem: Problem) -> Outline:
    """Sort the equations.

    A bare left side that is no parameter or input and is primed nowhere is a definition; primed elsewhere it still is
    one where it has no start value and its own right side does not prime it.
    """
    names = [n for e in problem.equations for n in names_in(e)]
    primed = {n.name for n in names if n.primes}
    taken = problem.parameters.keys() | problem.inputs.keys()
    operator = "s" not in taken | primed | _bare_lefts(problem)
    blocks = [e for e in problem.equations if operator and any(n.name == "s" for n in names_in(e))]
    definitions: dict[str, Equation] = {}
    equations = []
    for equation in problem.equations:
        left = equation.left
        if equation in blocks:
            continue
        if isinstance(left, Name) and not left.primes and left.name not in taken and left.name not in ("t", "pi"):
            inner = {n.name for n in names_of(equation.right) if n.primes}
            if left.name not in primed or (left.name not in problem.start and left.name not in inner):
                definitions.setdefault(left.name, equation)
                continue
        equations.append(equation)
    outputs = {e.left.name for e in blocks if isinstance(e.left, Name)}
    unknowns = dict.fromkeys(n.name for n in names if n.name in primed and n.name not in taken)
    kept = tuple(n for n in unknowns if n not in definitions and n not in outputs and n not in ("t", "pi"))
    return Outline(definitions, tuple(equations), tuple(blocks), kept)


def without_doubled(problem: Problem, outline: Outline) -> tuple[Problem, list[Fault]]:
    """The problem without inputs and parameters that bear the name of an unknown or a definition, and those faults."""
    too_many = len(outline.equations) > len(outline.unknowns)
    started = {name.rstrip("'") for name in problem.start}
    found: dict[str, Fault] = {}
    for equation in outline.equations:
        own = {n.name for n in names_in(equation) if n.primes and n.name in started}
        what = "an unknown"
        if isinstance(equation.left, Name) and too_many:
            primed = any(n.primes for n in names_in(equation))
            own |= {equation.left.name} if equation.left.primes or not primed else set()
            what = "an unknown" if primed else "a definition"
        for name in sorted(own):
            for table, given in (("inputs", "an input"), ("parameters", "a parameter")):
                if name in getattr(problem, table):
                    fault = Fault(f'"{name}" is both {given} and {what}.', "Choose two names.", f"{table}.{name}")
                    found.setdefault(name, fault)
    if not found:
        return problem, []
    inputs = {name: given for name, given in problem.inputs.items() if name not in found}
    # What only a dropped formula uses is no unused parameter.
    dropped = [problem.inputs[name].tree for name in found if name in problem.inputs]
    gone = found.keys() | {n.name for tree in dropped if tree for n in names_of(tree)}
    gone -= {n.name for equation in problem.equations for n in names_in(equation)} - found.keys()
    gone -= {n.name for given in inputs.values() if given.tree for n in names_of(given.tree)}
    parameters = {name: given for name, given in problem.parameters.items() if name not in gone}
    return replace(problem, inputs=inputs, parameters=parameters), list(found.values())


def names_in(equation: Equation) -> list[Name]:
    """Every name of an equation, left to right."""
    return names_of(equation.left) + names_of(equation.right)


def _bare_lefts(problem: Problem) -> set[str]:
    return {e.left.name for e in problem.equations if isinstance(e.left, Name)}


def name_faults(problem: Problem, outline: Outline) -> Iterator[Fault]:
    """Undefined, shadowed and doubly defined names, primes where none may stand, parameters without use."""
    known = {*problem.parameters, *problem.inputs, *outline.definitions, *outline.unknowns, *outline.outputs}
    known |= {n.name for e in outline.blocks for n in names_of(e.left)} - {"s"}
    yield from _shadowed(problem, outline)
    yield from _twice(problem, outline)
    told: set[str] = set()
    for equation in problem.equations:
        in_s = equation in outline.blocks
        for name in names_in(equation):
            if name.name in known or name.name in ("t", "pi") or (in_s and name.name == "s"):
                if name.primes and (name.name in problem.parameters or name.name in ("t", "pi")):
                    yield fault_at(name, f'"{name.name}" is no signal and has no derivative.', "Remove the prime.")
            elif name.name not in told:
                told.add(name.name)
                yield fault_at(name, f'"{name.name}" is not defined.', _nearest(name.name, known))
    yield from _unused(problem)


def _nearest(word: str, known: Iterable[str]) -> str:
    near = get_close_matches(word, sorted(known), 1)
    guess = f'Did you mean "{near[0]}"? ' if near else ""
    return f"{guess}Give it an equation, a parameter or an input."


def _shadowed(problem: Problem, outline: Outline) -> Iterator[Fault]:
    tables = [("parameters", problem.parameters), ("inputs", problem.inputs)]
    for table, given in tables:
        for name in given:
            if name in FUNCTIONS or name in ("t", "pi"):
                yield Fault(f'"{name}" is taken.', "Choose another name.", f"{table}.{name}")
    for name in problem.inputs:
        if name in problem.parameters:
            yield Fault(f'"{name}" is a parameter too.', "Choose another name.", f"inputs.{name}")
    for name in (*outline.unknowns, *outline.definitions):
        if name in FUNCTIONS:
            yield Fault(f'"{name}" is a function and cannot name a signal.', "Choose another name.", "equations")


def _twice(problem: Problem, outline: Outline) -> Iterator[Fault]:
    for equation in problem.equations:
        left = equation.left
        if not isinstance(left, Name) or left.primes:
            continue
        if left.name in problem.parameters or left.name in problem.inputs:
            continue
        first = outline.definitions.get(left.name)
        if first is not None and first is not equation:
            yield fault_at(left, f'"{left.name}" is defined twice.', "Remove one of the two definitions.")
        if first is not None and left.name in outline.outputs:
            yield fault_at(left, f'"{left.name}" is defined twice.', "Remove one of the two definitions.")


def _unused(problem: Problem) -> Iterator[Fault]:
    used = {n.name for e in problem.equations for n in names_in(e)}
    used |= {n.name for i in problem.inputs.values() if i.tree for n in names_of(i.tree)}
    for name in problem.parameters:
        if name not in used and not _stands_in_a_value(problem, name):
            yield Fault(f'The parameter "{name}" is not used.', "Remove it, or use it.", f"parameters.{name}")
    watched = {w.name for w in problem.watch}
    for name in problem.inputs:
        if name not in used | watched:
            yield Fault(f'The input "{name}" is not used.', "Remove it, or use it.", f"inputs.{name}")


def _stands_in_a_value(problem: Problem, name: str) -> bool:
    """Whether another value of the file (a parameter's formula, a start value) names the parameter."""
    word = re.compile(rf"(?<![\w.]){re.escape(name)}(?!\w)")
    own = f"parameters.{name}"
    return any(
        word.search(problem.text[start:end])
        for key, (start, end) in problem.spans.items()
        if (key == "duration" or key.startswith(_VALUES)) and key != own and not key.startswith(own + ".")
    )
