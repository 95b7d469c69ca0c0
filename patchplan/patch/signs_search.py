"""Fewest vertices to take out of a signed graph, with a proved lower bound."""

from __future__ import annotations

from collections.abc import Iterable
from math import ceil
from random import Random

import numpy as np

from patchplan.patch.signs_cycles import Cycle, cycle_bound, matrix, packing, pool, violated
from patchplan.patch.signs_graph import SignedGraph

_HEAVY = 10**6
#: Steps of one local search, at most and per vertex; starts of it.
_STEPS, _STEPS_EACH, _STARTS = 10_000, 200, 3
#: Vertex visits of all rounds of cutting planes, which bounds the work on large graphs.
_CUT_VISITS = 20_000
#: Graphs up to this size get all nodes of the limit; a node of a larger one costs more, so it gets fewer.
_FULL_SIZE = 100
#: How often the graph is mended for the first pool of cycles, and after each answer.
_FIRST_POOL, _NEXT_POOL = 10, 5


def fewest_removals(graph: SignedGraph, node_limit: int) -> tuple[frozenset[int], int]:
    """Vertices to take out, as places in the graph, and how many are needed at least.

    Parameters
    ----------
    graph
        A connected piece.
    node_limit
        Branch-and-bound nodes, for graphs of up to a hundred vertices.
    """
    cycles = violated(graph, np.zeros(graph.size))
    lower = packing(cycles)
    best = _local_search(graph, lower)
    if len(best) > lower:
        rounds = max(5, _CUT_VISITS // graph.size)
        lower = max(lower, _up(cycle_bound(graph, cycles, rounds)))
    nodes = int(node_limit * min(1.0, (_FULL_SIZE / graph.size) ** 4))
    return _branch(graph, cycles, best, lower, nodes)


def _up(bound: float) -> int:
    """Whole removals that a bound from floating-point arithmetic proves."""
    return ceil(bound - 1e-3)


def _local_search(graph: SignedGraph, goal: int) -> frozenset[int]:
    """Best of a few runs of a tabu search."""
    best: frozenset[int] = frozenset(np.flatnonzero(graph.removable).tolist())
    for seed in range(_STARTS):
        best = min(best, _Search(graph, seed).run(min(_STEPS, _STEPS_EACH * graph.size), goal), key=len)
        if len(best) <= goal:
            break
    return best


class _Search:
    """Put vertices back one at a time, taking out again those that contradict; what was taken out rests for a while."""

    def __init__(self, graph: SignedGraph, seed: int) -> None:
        m = graph.size
        self.random = Random(seed)
        self.around = graph.neighbours()
        self.weight = np.where(graph.removable, 1, _HEAVY).tolist()
        self.polarity = [0] * m
        #: Weight of the vertices that would have to go if the vertex came back as + or as -.
        self.against = {1: [0] * m, -1: [0] * m}
        self.out = list(range(m))
        self.rests_until = [0] * m

    def run(self, steps: int, goal: int) -> frozenset[int]:
        """Fewest vertices out that were seen."""
        out = self.out
        weight = sum(self.weight)
        least, best = _HEAVY, frozenset(v for v in out if self.weight[v] == 1)
        for step in range(steps):
            if self.random.random() < 0.1:
                vertex, sign, tenure = self.random.choice(out), self.random.choice((1, -1)), 3
            else:
                picks, change = self._best_moves(step)
                if not picks:
                    continue
                vertex, sign = picks[int(self.random.random() * len(picks))]
                tenure = 3 + (len(picks) // 4 if change == 0 else 0)
            weight += self.against[sign][vertex] - self.weight[vertex]
            self._insert(vertex, sign, step + tenure)
            if weight < least:
                least, best = weight, frozenset(out)
                if least <= goal:
                    break
        return best

    def _best_moves(self, step: int) -> tuple[list[tuple[int, int]], int]:
        """(Vertex, polarity) of all insertions that change the weight least, and that change."""
        least, picks = 4 * _HEAVY, []
        plus, minus, weight, rests_until = self.against[1], self.against[-1], self.weight, self.rests_until
        for v in self.out:
            if rests_until[v] > step:
                continue
            for sign, against in ((1, plus[v]), (-1, minus[v])):
                change = against - weight[v]
                if change < least:
                    least, picks = change, [(v, sign)]
                elif change == least:
                    picks.append((v, sign))
        return picks, least

    def _insert(self, vertex: int, sign: int, rest: int) -> None:
        self.out.remove(vertex)
        self.polarity[vertex] = sign
        for other, relation in self.around[vertex]:
            self.against[-sign * relation][other] += self.weight[vertex]
            if self.polarity[other] * relation * sign < 0:
                self._eject(other, rest)

    def _eject(self, vertex: int, rest: int) -> None:
        for other, relation in self.around[vertex]:
            self.against[-self.polarity[vertex] * relation][other] -= self.weight[vertex]
        self.polarity[vertex] = 0
        self.out.append(vertex)
        if self.weight[vertex] == 1:
            self.rests_until[vertex] = rest + int(self.random.random() * 10)


def _branch(
    graph: SignedGraph, cycles: list[Cycle], best: frozenset[int], lower: int, nodes: int
) -> tuple[frozenset[int], int]:
    """Exact 0/1 program over the cycles, which grow by those that its answers leave, until the bounds meet."""
    random = np.random.default_rng(0)
    if lower < len(best) and nodes:
        cycles = list(dict.fromkeys([*cycles, *pool(graph, np.zeros(graph.size), random, _FIRST_POOL)]))
    least_nodes = max(1, nodes // 50)
    while lower < len(best) and nodes > 0:
        taken, bound, used = _program(graph.size, cycles, lower, len(best), nodes)
        nodes -= max(used, least_nodes)
        lower = max(lower, min(bound, len(best)))
        if taken is None:
            break
        left = pool(graph, _indicator(taken, graph.size), random, _NEXT_POOL)
        if not left:
            best = taken
        cycles += left
    return best, lower


def _indicator(taken: Iterable[int], size: int) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    chosen = np.zeros(size)
    chosen[list(taken)] = 1
    return chosen


def _program(
    size: int, cycles: list[Cycle], lower: int, upper: int, nodes: int
) -> tuple[frozenset[int] | None, int, int]:
    """A set smaller than ``upper`` that meets every cycle, or None; a lower bound; nodes used.

    The last column stands for the set already known, so that there is always an answer, and with it a bound.
    """
    from scipy.optimize import Bounds, LinearConstraint, milp

    rows = matrix([(*c, size) for c in cycles], size + 1)
    count = np.ones((1, size + 1))
    count[0, size] = upper - 1
    cost = np.ones(size + 1)
    cost[size] = upper
    found = milp(
        cost,
        constraints=[LinearConstraint(rows, 1, np.inf), LinearConstraint(count, lower, upper - 1)],
        bounds=Bounds(0, 1),
        integrality=np.ones(size + 1, dtype=np.int64),
        options={"node_limit": nodes},
    )
    if found.x is None:
        return None, lower, nodes
    chosen = frozenset(np.flatnonzero(found.x > 0.5).tolist())
    return (None if size in chosen else chosen), _up(found.mip_dual_bound), int(found.mip_node_count)
