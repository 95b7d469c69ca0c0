"""Names of loops: the nodes that each one runs through."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.records import Patch
from patchplan.sizing.loops import Circuits
from patchplan.sizing.model import Model
from patchplan.sizing.records import Loop

Array = NDArray[np.float64]
#: Between the nodes of a loop: along a wire, against it, and where the reference sets a start value.
ALONG, AGAINST, STARTS, STARTED = " → ", " ← ", " ⇢ ", " ⇠ "
#: (from, to, whether it is a start value)
_Edge = tuple[str, str, bool]


def named_loops(circuits: Circuits, model: Model, patch: Patch, errors: Array) -> tuple[Loop, ...]:
    """Loops with their errors, the one that a free speed takes up last.

    Parameters
    ----------
    errors
        Relative error of every row, shape ``(n_rows,)``.
    """
    logs = -np.log1p(np.maximum(errors, -1 + 1e-9))
    left = circuits.errors(logs).tolist()
    loops = [Loop(loop_name(path, model, patch), error) for path, error in zip(circuits.paths, left, strict=True)]
    if circuits.absorbed:
        loops.append(Loop(loop_name(circuits.absorbed, model, patch), 0.0, absorbed=True))
    return tuple(loops)


def loop_name(rows: Iterable[int], model: Model, patch: Patch) -> str:
    """Nodes in the order of the walk through these rows; the rows one by one where they make no single walk."""
    edges = _edges(rows, model, patch)
    ends: dict[str, list[int]] = {}
    for number, (source, node, _) in enumerate(edges):
        for place in (source, node):
            ends.setdefault(place, []).append(number)
    if all(len(numbers) <= 2 for numbers in ends.values()):
        loose = [place for place, numbers in ends.items() if len(numbers) == 1]
        first = next((place for place in loose if place == edges[ends[place][0]][0]), edges[0][0])
        text, used = _walk(edges, ends, first)
        if used == len(edges):
            return text
    return ", ".join(f"{node}(0)" if starts else f"{node}<-{source}" for source, node, starts in edges)


def _edges(rows: Iterable[int], model: Model, patch: Patch) -> list[_Edge]:
    stages = {s.name: s for s in patch.stages}
    by_node = patch.by_node()
    reference = next((s.node for s in patch.stages if s.kind == "reference"), "reference")
    edges = []
    for row in sorted(rows):
        ratio = model.ratios[row]
        stage = stages[ratio.stage]
        source = reference if ratio.wire < 0 else stage.wires[ratio.wire].source
        # An inverter only changes the sign.
        while source in by_node and by_node[source].kind == "inverter":
            source = by_node[source].wires[0].source
        edges.append((source, stage.node, ratio.wire < 0))
    return edges


def _walk(edges: list[_Edge], ends: Mapping[str, list[int]], first: str) -> tuple[str, int]:
    """Text of the walk from a node, and how many edges it took."""
    text, here, left = first, first, set(range(len(edges)))
    while onward := [number for number in ends[here] if number in left]:
        number = min(onward, key=lambda n: (edges[n][0] != here, n))
        left.discard(number)
        source, node, starts = edges[number]
        forth = source == here
        arrow = (STARTS if starts else ALONG) if forth else (STARTED if starts else AGAINST)
        here = node if forth else source
        text += arrow + here
    return text, len(edges) - len(left)
