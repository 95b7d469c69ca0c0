"""What each name of a problem stands for in its polynomials, and the equations as polynomials."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import partial

from patchplan.equation.algebra import Algebra
from patchplan.equation.choice import sorted_signals
from patchplan.equation.constants import names_of
from patchplan.equation.formula import fault_at
from patchplan.equation.laplace import realise
from patchplan.equation.model import Definitions
from patchplan.equation.outline import Outline, names_in
from patchplan.equation.polynomial import Atom, Kind, Polynomial
from patchplan.equation.problem import Equation, Input, Problem
from patchplan.equation.tree import Name, Node
from patchplan.errors import Fault, ProblemFaults


def algebra_of(problem: Problem, outline: Outline) -> tuple[Algebra, list[Fault]]:
    """Meaning of every name, and the faults of inputs."""
    adjustable = frozenset(p.name for p in problem.parameters.values() if p.adjustable)
    fixed = {p.name: p.value for p in problem.parameters.values() if not p.adjustable}
    timed = _time_definitions(problem, outline)
    sources = {n: _reason(i, problem) for n, i in problem.inputs.items() if _reason(i, problem)}
    formulas = {n: i.tree for n, i in problem.inputs.items() if i.tree is not None and n not in sources}
    signals = frozenset({*outline.unknowns, *outline.outputs, *outline.definitions} - timed.keys())
    named: set[str] = set()
    algebra = Algebra(fixed, adjustable, {}, frozenset(), sources, signals, problem.duration)
    faults: list[Fault] = []
    for name, tree in formulas.items():
        try:
            value = algebra.polynomial(tree)
        except ProblemFaults as error:
            faults += error.faults
            continue
        if value.value is not None:
            fixed[name] = value.value
            continue
        algebra.formulas[name] = tree
        if Kind.PARAMETER not in value.kinds():
            named.add(name)
    algebra.formulas.update(timed)
    algebra.named = frozenset(named)
    algebra.forget()
    return algebra, faults


def _reason(given: Input, problem: Problem) -> str:
    """Why an input arrives as it is, "" where it is a formula that may be rewritten."""
    if given.recording is not None:
        return "a recording"
    if given.within is not None:
        return "known only by its bounds"
    return "brought in through a terminal" if given.name in problem.terminals else ""


def _time_definitions(problem: Problem, outline: Outline) -> dict[str, Node]:
    """Definitions that are functions of time alone."""
    known = {"t", "pi", *problem.parameters}
    known |= {n for n, i in problem.inputs.items() if not _reason(i, problem)}
    found: dict[str, Node] = {}
    for _ in outline.definitions:
        before = len(found)
        for name, equation in outline.definitions.items():
            parts = names_of(equation.right)
            if name not in found and all(n.name in known | found.keys() and not n.primes for n in parts):
                found[name] = equation.right
        if len(found) == before:
            break
    return found


@dataclass(frozen=True)
class Meaning:
    """Equations as polynomials.

    Attributes
    ----------
    equations
        By a running number: the polynomial that is zero, and its line.
    definitions
        Sorted; time-only ones too, which no polynomial names.
    unknowns
        Names of the file and of the states of blocks in s.
    at_rest
        Those that start at zero without being asked.
    faults
        All found so far.
    whole
        Whether every equation was understood; the polynomial of one that was not stands for its names alone.
    undefined
        Names that the equations use and nothing defines.
    """

    algebra: Algebra
    equations: dict[int, tuple[Polynomial, Equation]]
    definitions: Definitions
    unknowns: tuple[str, ...]
    at_rest: frozenset[str]
    faults: tuple[Fault, ...] = ()
    whole: bool = True
    undefined: frozenset[str] = frozenset()


def meaning_of(problem: Problem, outline: Outline, before: Iterable[Fault] = ()) -> Meaning:
    """Polynomials of all equations, and all their faults: functions and quotients of signals, loops among definitions.

    Parameters
    ----------
    before
        Faults found already; an equation that one of them names is not looked into.
    """
    unsound = {fault.key for fault in before if fault.key.startswith("equations")}
    algebra, faults = algebra_of(problem, outline)
    equations: dict[int, tuple[Polynomial, Equation]] = {}
    definitions: dict[Atom, Polynomial] = {}
    at_rest: list[str] = []

    def understood(equation: Equation, work: Callable[[], Polynomial]) -> Polynomial:
        if equation.key not in unsound:
            try:
                return work()
            except ProblemFaults as error:
                faults.extend(error.faults)
        return _names_alone(equation, algebra)

    for equation in outline.equations:
        equations[len(equations)] = understood(equation, partial(_zero, equation, algebra)), equation
    for name, equation in outline.definitions.items():
        value = understood(equation, partial(algebra.polynomial, equation.right))
        definitions[Atom(Kind.SIGNAL, name)] = value
    outline_blocks = [e for e in outline.blocks if e.key not in unsound]
    faults += _blocks(problem, outline, outline_blocks, algebra, equations, definitions, at_rest)
    ordered, loop = sorted_signals(definitions)
    while loop:
        faults.append(_loop(loop, outline))
        ordered, loop = sorted_signals({a: value for a, value in definitions.items() if a not in loop})
    unknowns = (*outline.unknowns, *at_rest)
    known = {*problem.parameters, *problem.inputs, *algebra.signals, *algebra.formulas, "t", "pi", "s"}
    undefined = frozenset(n.name for e in problem.equations for n in names_in(e)) - known
    return Meaning(
        algebra, equations, Definitions(ordered, algebra), unknowns, frozenset(at_rest),
        (*before, *faults), not (faults or unsound), undefined,
    )  # fmt: skip


def _names_alone(equation: Equation, algebra: Algebra) -> Polynomial:
    """What an equation at fault still tells: the signals that it holds, and their order."""
    # A definition does not need itself.
    names = [n for n in names_in(equation) if n.primes or n is not equation.left]
    atoms = sorted({Atom(Kind.SIGNAL, n.name, n.primes) for n in names if n.name in algebra.signals})
    return Polynomial.sum([Polynomial.of(atom) for atom in atoms])


def _zero(equation: Equation, algebra: Algebra) -> Polynomial:
    faults: list[Fault] = []
    sides = []
    for side in (equation.left, equation.right):
        try:
            sides.append(algebra.polynomial(side))
        except ProblemFaults as error:
            faults += error.faults
    if faults:
        raise ProblemFaults(faults)
    return sides[0] - sides[1]


def _blocks(
    problem: Problem, outline: Outline, blocks: Sequence[Equation], algebra: Algebra,
    equations: dict[int, tuple[Polynomial, Equation]], definitions: dict[Atom, Polynomial], at_rest: list[str],
) -> list[Fault]:  # fmt: skip
    """Put the states of the block in s among the equations."""
    faults: list[Fault] = []
    taken = frozenset({*problem.parameters, *problem.inputs, *outline.unknowns, *outline.definitions})
    for equation in blocks[1:]:
        faults.append(
            fault_at(
                equation.left, "not built in this version: a second block in s.",
                "Write one of them as a differential equation.",
            )
        )  # fmt: skip
    for equation in blocks[:1]:
        try:
            made = realise(equation, algebra, taken)
        except ProblemFaults as error:
            faults += error.faults
            continue
        definitions.update(made.definitions)
        for state, rate in made.rates.items():
            zero = Polynomial.of(Atom(Kind.SIGNAL, state.name, 1)) - rate
            equations[len(equations)] = zero, equation
            at_rest.append(state.name)
    return faults


def _loop(loop: list[Atom], outline: Outline) -> Fault:
    names = [a.name for a in loop]
    equation = next((outline.definitions[n] for n in names if n in outline.definitions), None)
    place = equation.left if equation else Name(names[0])
    circle = " needs ".join([*names, names[0]])
    return fault_at(
        place, f"Algebraic loop: {circle}.", "Solve it for one of them by hand, or put an integrator into it."
    )


def start_of(given: Input, algebra: Algebra) -> Fraction:
    """Value of an input just after t = 0 (0, or the bound nearest to it, where only bounds are known)."""
    import numpy as np

    from patchplan.equation.waveform import Waveform

    if given.within is not None:
        low, high = given.within
        return min(max(low, Fraction(0)), high)
    tree = algebra.folded(given.tree) if given.tree is not None else None
    return Fraction(repr(float(Waveform(tree, given.recording).values(np.zeros(1))[0])))


def slope_of(given: Input, algebra: Algebra, primes: int) -> Fraction:
    """Derivative of an input just after t = 0: of its formula, of the first leg of its recording, 0 within bounds."""
    import numpy as np

    from patchplan.equation.formula import tree_derivative
    from patchplan.equation.waveform import numeric_tree

    if given.recording is not None:
        times, values = given.recording.times, given.recording.values
        after = next((i for i, x in enumerate(times) if i and x > 0.0), 1)
        leg = (values[after] - values[after - 1]) / (times[after] - times[after - 1])
        return Fraction(repr(leg)) if primes == 1 else Fraction(0)
    if given.tree is None:
        return Fraction(0)
    tree = algebra.folded(given.tree)
    for _ in range(primes):
        tree = tree_derivative(tree)
    return Fraction(repr(float(numeric_tree(tree, np.zeros(1))[0])))
