"""Which of equally many sign stages: those that put least lag into fast loops of high Q."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Mapping, Sequence
from fractions import Fraction
from typing import TypeAlias

#: Node -> what it takes with which coefficients.
Inputs: TypeAlias = Mapping[str, Sequence[tuple[str, Fraction]]]
#: A loop of a higher Q counts like one of this, since a lag of any size would upset it.
_HIGHEST_Q = 20.0


def lag_weight(target: str, source: str, inputs: Inputs, integrators: frozenset[str]) -> float:
    """What a lag from ``source`` to ``target`` costs: rate times Q of the shortest loop through them, 0 without a loop.

    The rate is the geometric mean of the loop's coefficients over its integrators, the damping the mean of what these
    take of themselves; Q is their ratio. A lag T moves a loop's pole by rate * T of its distance, and its damping by
    rate * T * Q of itself (of second order; the same is taken for all).
    """
    loop = _shortest_loop(target, source, inputs)
    states = [n for n in loop if n in integrators]
    if not states:
        return 0.0
    rate = 1.0
    for here, before in zip(loop, [*loop[1:], loop[0]], strict=True):
        rate *= max((abs(float(c)) for k, c in inputs.get(here, ()) if k == before), default=1.0)
    rate = float(rate ** (1 / len(states)))
    damping = sum(max(0.0, -float(c)) for n in states for k, c in inputs[n] if k == n) / len(states)
    return rate * (min(rate / damping, _HIGHEST_Q) if damping else _HIGHEST_Q)


def _shortest_loop(target: str, source: str, inputs: Inputs) -> list[str]:
    """Nodes from ``target`` back to what takes it, ``source`` second; empty where there is no way back."""
    before = {source: target}
    queue = deque([source])
    while queue and source != target:
        here = queue.popleft()
        for taken, _ in inputs.get(here, ()):
            if taken == target:
                return [target, *_back(here, before, target)]
            if taken not in before:
                before[taken] = here
                queue.append(taken)
    return [target] if source == target else []


def _back(here: str, before: Mapping[str, str], target: str) -> Iterator[str]:
    path = []
    while here != target:
        path.append(here)
        here = before[here]
    return reversed(path)
