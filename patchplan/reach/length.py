"""Runs that would never end: how many cycles a problem holds, before it is solved."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from patchplan.equation.system import System
from patchplan.equation.tree import Binary, Call, Minus, Node, text_of
from patchplan.equation.waveform import line_of
from patchplan.errors import Fault, ProblemFaults
from patchplan.reach.field import Field

#: Most cycles of a source or of a linear system's own modes in one run.
MOST_CYCLES = 20_000
#: Systems with more states are not looked at: their modes would cost as much as the run.
MOST_STATES = 60


def check_length(system: System, field: Field) -> None:
    """Refuse a run of more than :data:`MOST_CYCLES` cycles.

    Raises
    ------
    ProblemFaults
        With one fault for every source, or for the system itself, that is too fast for the duration.
    """
    duration = float(system.duration)
    faults = []
    for source in system.sources:
        tree = source.waveform.tree if source.waveform else None
        for call in _waves(tree) if tree is not None else ():
            line = line_of(call.arguments[0])
            if line is not None:
                faults += _fault(text_of(call), abs(float(line[1])) * duration / (2 * np.pi))
    if system.is_linear and 0 < len(system.states) <= MOST_STATES:
        states = np.zeros(len(system.states))
        slopes = field.bind(field.weights(system.knob_values())).linear_part(states)[:, : len(states)].toarray()
        turning = np.abs(np.linalg.eigvals(slopes).imag).max()
        faults += _fault("the system's own fastest mode", float(turning) * duration / (2 * np.pi))
    if faults:
        raise ProblemFaults(faults)


def _fault(name: str, cycles: float) -> list[Fault]:
    if cycles <= MOST_CYCLES:
        return []
    found = f"The run holds {cycles:.3g} cycles of {name}."
    return [Fault(found, f"Shorten the duration: at most {MOST_CYCLES} are planned.", "duration")]


def _waves(tree: Node) -> Iterator[Call]:
    """Calls of sin, cos and tan inside a tree."""
    pending: list[Node] = [tree]
    while pending:
        node = pending.pop()
        if isinstance(node, Call):
            if node.function in ("sin", "cos", "tan"):
                yield node
            pending += node.arguments
        elif isinstance(node, Binary):
            pending += [node.left, node.right]
        elif isinstance(node, Minus):
            pending.append(node.operand)
