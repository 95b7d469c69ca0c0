"""Well-posedness as a list of small named checks; each gives faults, none stops the others."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from difflib import get_close_matches
from fractions import Fraction
from math import prod

import numpy as np

from patchplan.equation.algebra import Algebra
from patchplan.equation.knobs import divisors
from patchplan.equation.outline import Outline, name_faults
from patchplan.equation.polynomial import Kind
from patchplan.equation.problem import Problem
from patchplan.equation.system import System
from patchplan.equation.tree import Call, Node, Number, text_of
from patchplan.equation.waveform import SAMPLES, Array, numeric_tree
from patchplan.errors import Fault

#: More jumps in one run than any board is asked to follow.
MOST_JUMPS = 20_000

_PERIODIC = ("square", "triangle", "sawtooth")


def faults_before(problem: Problem, outline: Outline) -> list[Fault]:
    """Faults that show before any mathematics."""
    checks = (_duration, _recordings, name_faults, _terminals_of_inputs, _starts_in_ranges)
    return [fault for check in checks for fault in check(problem, outline)]


def _duration(problem: Problem, _: Outline) -> Iterator[Fault]:
    if problem.duration <= 0:
        yield Fault("The duration is not above zero.", "Write the length of the run in problem time.", "duration")


def _recordings(problem: Problem, _: Outline) -> Iterator[Fault]:
    for name, given in problem.inputs.items():
        if given.recording is None:
            continue
        times = given.recording.times
        if times[0] > 0.0 or times[-1] < float(problem.duration):
            yield Fault(
                f"The recording {given.recording.file} runs from {times[0]:.9g} to {times[-1]:.9g}, the problem from 0 "
                f"to {float(problem.duration):.9g}.",
                "Record the whole run, or shorten the duration.", f"inputs.{name}",
            )  # fmt: skip


def _terminals_of_inputs(problem: Problem, _: Outline) -> Iterator[Fault]:
    for name in (*problem.terminals, *problem.ranges):
        base = name.rstrip("'")
        table = "terminals" if name in problem.terminals else "ranges"
        if base in problem.parameters:
            yield Fault(f'"{base}" is a parameter, no signal.', "Name a signal.", f"{table}.{name}")


def _starts_in_ranges(problem: Problem, _: Outline) -> Iterator[Fault]:
    for name, (low, high) in problem.ranges.items():
        if name in problem.start and not low <= problem.start[name] <= high:
            yield _outside(name, float(problem.start[name]))


def range_faults(problem: Problem, system: System) -> Iterator[Fault]:
    """Stated ranges that inputs and definitions leave at the start already."""
    values = {s.name: float(s.start) for s in system.states}
    for source in system.sources:
        values[source.name] = float(source.waveform.values(np.zeros(1))[0]) if source.waveform else np.nan
    knobs = {k.name: float(k.value) for k in system.knobs}
    for row in system.signals:
        parts = (
            float(t.coefficient) * prod(knobs[k] for k in t.knobs) * prod(values[n] ** p for n, p in t.factors)
            for t in row.terms
        )
        values[row.name] = sum(parts)
    for name, (low, high) in problem.ranges.items():
        slack = 1e-9 * max(abs(float(low)), abs(float(high)))
        value = values.get(name, np.nan)
        if name not in problem.start and (value < float(low) - slack or value > float(high) + slack):
            yield _outside(name, value)


def _outside(name: str, value: float) -> Fault:
    return Fault(
        f"{name} starts at {value:.6g}, outside this range.",
        "Widen the range so that it holds the start, or change the start values.", f"ranges.{name}",
    )  # fmt: skip


def start_faults(
    problem: Problem, orders: Mapping[str, int], at_rest: frozenset[str], outline: Outline
) -> Iterator[Fault]:
    """Start values that are missing, and those of names that are no state."""
    wanted = [name + "'" * k for name, order in orders.items() if name not in at_rest for k in range(order)]
    for name in wanted:
        if name not in problem.start:
            shown = f'"{name}"' if "'" in name else name
            yield Fault(f"The start value of {name} is missing.", f"Write {shown} = 0.0 under [start].", "start")
    for name in problem.start:
        if name in wanted:
            continue
        base = name.rstrip("'")
        if base in at_rest:
            yield Fault(f"{name} comes from a block in s, which starts at rest.", "Remove it.", f"start.{name}")
        elif base in outline.definitions:
            yield Fault(f"{name} follows from its definition and has no start value.", "Remove it.", f"start.{name}")
        elif base in orders:
            yield Fault(
                f"{base} is of order {orders[base]}; {name} follows from the equations.", "Remove it.", f"start.{name}"
            )
        else:
            near = get_close_matches(name, wanted, 1)
            guess = f'Did you mean "{near[0]}"?' if near else "Remove it."
            yield Fault(f"{name} is no state of the equations.", guess, f"start.{name}")


def count_faults(orders: Mapping[str, int], equations: int) -> Iterator[Fault]:
    """As many differential equations as unknowns."""
    if equations != len(orders):
        names = ", ".join(orders) or "none"
        yield Fault(
            f"{equations} differential equations stand for {len(orders)} unknowns ({names}).",
            "Give one equation for each unknown; a name with a prime is an unknown.", "equations",
        )  # fmt: skip


def regular_faults(
    trees: Mapping[str, tuple[Node, str]], divided: Iterable[Node], duration: Fraction
) -> Iterator[Fault]:
    """Functions of time that have no finite value at the start or within the run.

    Parameters
    ----------
    trees
        Name shown -> (tree in t, key for the fault where the tree carries no place).
    divided
        Trees in t that something is divided by.
    """
    for name, (tree, key) in trees.items():
        found = _irregular(tree, float(duration))
        if found is not None:
            yield _placed(tree, key, f"{name} has no finite value {_when(found)}.", _finite(found))
    for tree in divided:
        found = _zero(tree, float(duration))
        if found is not None:
            yield _placed(tree, "equations", f"This divides by zero {_when(found)}.", _finite(found))


def _when(time: float) -> str:
    return "at the start" if time == 0.0 else f"at t = {time:.6g}"


def _finite(time: float) -> str:
    if time == 0.0:
        return "Write it so that it has a finite value at t = 0."
    return "Write it so that it stays finite, or end the run before."


def _placed(tree: Node, key: str, found: str, remedy: str) -> Fault:
    place = tree.origin
    return Fault(found, remedy, place.key, (place.start, place.end)) if place else Fault(found, remedy, key)


def _irregular(tree: Node, duration: float) -> float | None:
    """First time found in the run at which the tree has no finite value."""
    t = np.linspace(0.0, duration, SAMPLES)
    places = [float(t[i]) for i in np.flatnonzero(~np.isfinite(numeric_tree(tree, t)))[:1]]
    places += [x for x in (_zero(divisor, duration) for divisor in divisors(tree)) if x is not None]
    return min(places, default=None)


def _zero(divisor: Node, duration: float) -> float | None:
    """First zero found of a divisor, between samples too where it crosses zero without a jump."""
    t = np.linspace(0.0, duration, SAMPLES)
    below = numeric_tree(divisor, t)
    jumped = np.abs(np.diff(below)) > 0.5 * np.nanmax(np.abs(below), initial=0.0)
    crossed = np.append((below[:-1] * below[1:] < 0.0) & ~jumped, False)
    places = np.flatnonzero(crossed | (below == 0.0))
    if not places.size:
        return _touched(divisor, t, below)
    first = int(places[0])
    if below[first] == 0.0:
        return float(t[first])
    return float(t[first] + (t[first + 1] - t[first]) * below[first] / (below[first] - below[first + 1]))


def _touched(divisor: Node, t: Array, values: Array) -> float | None:
    """Place where a divisor comes to zero without crossing it."""
    middle = int(np.nanargmin(np.abs(values)))
    low, high = float(t[max(middle - 1, 0)]), float(t[min(middle + 1, t.size - 1)])
    # Each turn narrows the place about two hundred times; six go down to rounding.
    for _ in range(6):
        times = np.linspace(low, high, 401)
        sizes = np.abs(numeric_tree(divisor, times))
        place = int(np.nanargmin(sizes))
        low, high = float(times[max(place - 1, 0)]), float(times[min(place + 1, times.size - 1)])
    # A double zero is met to the square root of rounding.
    return float(times[place]) if sizes[place] <= 1e-14 * np.nanmax(np.abs(values)) else None


def jump_faults(trees: Mapping[str, tuple[Node, str]], duration: Fraction) -> Iterator[Fault]:
    """Pulses and periodic functions whose times change or are not positive, or with jumps beyond count."""
    for name, (tree, key) in trees.items():
        for call in _calls(tree):
            if call.function == "pulse" and not all(isinstance(a, Number) for a in call.arguments[1:]):
                yield _placed(call, key, f"Start and width in {name} are no constants.", "Write constants.")
            if call.function not in _PERIODIC:
                continue
            ends = numeric_tree(call.arguments[0], np.array([0.0, float(duration)]))
            period = float(numeric_tree(call.arguments[1], np.zeros(1))[0])
            if not isinstance(call.arguments[1], Number) or period <= 0.0:
                yield _placed(call, key, f"The period in {name} is no positive number.", "Write a positive constant.")
            elif not abs(ends[1] - ends[0]) / period < MOST_JUMPS / 2:
                yield _placed(
                    call, key, f"{name} has over {MOST_JUMPS} jumps in the run.",
                    "Use a longer period, or a shorter run.",
                )  # fmt: skip


def _calls(tree: Node) -> Iterator[Call]:
    stack = [tree]
    while stack:
        node = stack.pop()
        if isinstance(node, Call):
            yield node
            stack += node.arguments
        else:
            stack += [getattr(node, x) for x in ("operand", "left", "right") if hasattr(node, x)]


def time_trees(algebra: Algebra) -> dict[str, tuple[Node, str]]:
    """Every function of time met, by the text shown for it."""
    found: dict[str, tuple[Node, str]] = {}
    for atom, tree in algebra.functions.items():
        if atom.kind is Kind.TIME:
            key = f"inputs.{atom.name}" if atom.name in algebra.named else "equations"
            found[text_of(algebra.written[atom])] = (tree, key)
    return found
