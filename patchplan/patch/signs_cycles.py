"""Cycles round which the relations contradict each other: each has to lose a vertex."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.signs_graph import SignedGraph

if TYPE_CHECKING:
    from scipy.sparse import csr_array

Array: TypeAlias = NDArray[np.float64]
#: Removable vertices of a contradictory cycle, ascending.
Cycle: TypeAlias = tuple[int, ...]
#: Sources of one call for shortest paths; bounds the memory of large graphs.
_BATCH = 256
#: Prefers the cycle with fewer edges among equals, and keeps sparse matrices from dropping edges of length zero.
_STEP = 1e-7


def violated(graph: SignedGraph, weight: Array, below: float = 1 - 1e-4) -> list[Cycle]:
    """For each vertex a lightest contradictory cycle through it, where lighter than wanted.

    A walk in the double cover of the graph changes sheets on every edge whose ends must differ, or lies on one where
    they must agree; a contradictory cycle is a path from a vertex to its own copy (Gerards and Schrijver 1986).

    Parameters
    ----------
    graph
        The graph; one lightest cycle of all is always among those found.
    weight
        Of every vertex; ``(n_vertices,)``.
    below
        Weight under which a cycle counts as violated.

    Returns
    -------
    list of tuple of int
        Each once, in a fixed order.
    """
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import dijkstra

    m = graph.size
    start = np.concatenate([graph.first, graph.first + m])
    end = np.concatenate([graph.second + m * ~graph.same, graph.second + m * graph.same])
    length = np.tile(np.maximum(weight[graph.first] + weight[graph.second], 0.0) / 2 + _STEP, 2)
    cover = csr_array((length, (start, end)), shape=(2 * m, 2 * m))
    cycles: set[Cycle] = set()
    for low in range(0, m, _BATCH):
        roots = np.arange(low, min(low + _BATCH, m))
        distance, before = dijkstra(cover, directed=False, indices=roots, return_predecessors=True, limit=below)
        for row in np.flatnonzero(distance[np.arange(len(roots)), roots + m] < below):
            cycle = _walk(before[row], int(roots[row]), m)
            # A walk that meets a vertex twice holds a lighter cycle, which another root finds.
            if len(set(cycle)) == len(cycle):
                cycles.add(tuple(sorted(v for v in cycle if graph.removable[v])))
    return sorted(cycles)


def _walk(before: NDArray[np.int32], root: int, m: int) -> list[int]:
    """Vertices of the path from a root to its copy."""
    path, here = [], int(before[root + m])
    while here != root:
        path.append(here % m)
        here = int(before[here])
    return [root, *path]


def matrix(cycles: Sequence[Cycle], columns: int) -> csr_array:
    """Incidence of cycles and vertices; ``(n_cycles, columns)``."""
    from scipy.sparse import csr_array

    sizes = [len(c) for c in cycles]
    indices = np.fromiter((v for c in cycles for v in c), dtype=np.int32, count=sum(sizes))
    return csr_array((np.ones(len(indices)), indices, np.cumsum([0, *sizes])), shape=(len(cycles), columns))


def packing(cycles: Sequence[Cycle]) -> int:
    """Number of cycles without common vertex that are found shortest first."""
    used: set[int] = set()
    count = 0
    for cycle in sorted(cycles, key=lambda c: (len(c), c)):
        if used.isdisjoint(cycle):
            used.update(cycle)
            count += 1
    return count


def cycle_bound(graph: SignedGraph, cycles: list[Cycle], rounds: int) -> float:
    """Least total of fractional removals with which every cycle loses one vertex at least.

    Cutting planes: what the found cycles ask for, then the cycles that this violates, until none is left or the
    rounds are used up; ``cycles`` grows.
    """
    from scipy.optimize import Bounds, LinearConstraint, milp

    value, cost = 0.0, np.ones(graph.size)
    known = set(cycles)
    for _ in range(rounds):
        rows = LinearConstraint(matrix(cycles, graph.size), 1, np.inf)
        found = milp(cost, constraints=rows, bounds=Bounds(0, 1))
        if found.x is None or found.fun is None:
            break
        value = found.fun
        new = [c for c in violated(graph, found.x) if c not in known]
        if not new:
            break
        known.update(new)
        cycles += new
    return value


def pool(graph: SignedGraph, taken: Array, random: np.random.Generator, repeats: int) -> list[Cycle]:
    """Many short cycles that miss what is taken out: the graph is mended at random, again and again.

    Parameters
    ----------
    taken
        1 for a vertex taken out, 0 for one that stays; ``(n_vertices,)``.
    repeats
        How often the graph is mended.
    """
    found: dict[Cycle, None] = {}
    for _ in range(repeats):
        mended = taken.copy()
        while True:
            # Noise of less than 0.4 over any cycle varies which of the equally short cycles is found.
            new = violated(graph, mended + random.random(graph.size) * (0.4 / graph.size), 0.5)
            if not new:
                break
            found.update(dict.fromkeys(new))
            used: set[int] = set()
            for cycle in (new[i] for i in random.permutation(len(new))):
                if used.isdisjoint(cycle):
                    used.update(cycle)
                    mended[cycle[int(random.integers(len(cycle)))]] = 1
    return list(found)
