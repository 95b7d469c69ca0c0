"""Fewest vertices to take out of a signed graph, with a proved lower bound."""

from __future__ import annotations

from math import ceil
from random import Random

import numpy as np

from patchplan.patch.signs_cycles import Cycle, cycle_bound, matrix, packing, pool, violated
from patchplan.patch.signs_graph import SignedGraph

_HEAVY = 10**6
#: Steps of one local search at most, and starts of it.
_STEPS, _STARTS = 10_000, 3
#: Vertex visits of all rounds of cutting planes, which bounds the work on large graphs.
_CUT_VISITS = 20_000
#: Size of the graph for which the limit of nodes is meant; a larger one, where a node costs more, gets fewer, and a
#: smaller one more, but not more than this factor.
_USUAL_SIZE, _MOST_NODES = 130, 10
#: With fewer nodes than this the branching is not begun: its preparation costs as much.
_LEAST_NODES = 100
#: How often the graph is mended for the first pool of cycles: vertices for each time, and their square times that at
#: most. A large pool spares branches, until the program itself gets slow.
_POOL_EACH, _POOL_WORK = 4, 200_000


def fewest_removals(graph: SignedGraph, node_limit: int) -> tuple[frozenset[int], int]:
    """Vertices to take out, as places in the graph, and how many are needed at least.

    Parameters
    ----------
    graph
        A connected piece.
    node_limit
        Branch-and-bound nodes for a graph of 130 vertices; smaller ones get more, larger ones fewer.
    """
    cycles = violated(graph, np.zeros(graph.size))
    lower = packing(cycles)
    best = _search(graph, 0, lower)
    if len(best) > lower:
        rounds = max(5, _CUT_VISITS // graph.size)
        lower = max(lower, _up(cycle_bound(graph, cycles, rounds)))
    for seed in range(1, _STARTS):
        if len(best) > lower:
            best = min(best, _search(graph, seed, lower), key=len)
    nodes = int(node_limit * min(_MOST_NODES, (_USUAL_SIZE / graph.size) ** 8))
    return _branch(graph, cycles, best, lower, nodes) if nodes >= _LEAST_NODES and len(best) > lower else (best, lower)


def _up(bound: float) -> int:
    """Whole removals that a bound from floating-point arithmetic proves."""
    return ceil(bound - 1e-3)


def _search(graph: SignedGraph, seed: int, goal: int) -> frozenset[int]:
    """Best of one run of the local search."""
    return _Search(graph, seed).run(min(_STEPS, graph.size**2), goal)


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
    """Ask for a smaller set that meets every cycle known, add the cycles it leaves, and again, until there is none."""
    random = np.random.default_rng(0)
    repeats = min(graph.size // _POOL_EACH, _POOL_WORK // graph.size**2 + 1)
    cycles = list(dict.fromkeys([*cycles, *pool(graph, np.zeros(graph.size), random, repeats)]))
    least_nodes = max(1, nodes // 50)
    while lower < len(best) and nodes > 0:
        taken, used = _program(graph.size, cycles, lower, len(best) - 1, nodes)
        if taken is None:
            return best, len(best) if used < nodes else lower
        nodes -= max(used, least_nodes)
        chosen = np.zeros(graph.size)
        chosen[list(taken)] = 1
        left = pool(graph, chosen, random, repeats // 2 + 1)
        if not left:
            best = taken
        cycles += left
    return best, lower


def _program(size: int, cycles: list[Cycle], lower: int, upper: int, nodes: int) -> tuple[frozenset[int] | None, int]:
    """A set of a size within bounds that meets every cycle, or None, and the nodes used; all of them if undecided.

    Nothing is minimised: whether there is a set so small at all takes HiGHS less time to decide.
    """
    from scipy.optimize import Bounds, LinearConstraint, milp

    found = milp(
        np.zeros(size),
        constraints=[
            LinearConstraint(matrix(cycles, size), 1, np.inf),
            LinearConstraint(np.ones((1, size)), lower, upper),
        ],
        bounds=Bounds(0, 1),
        integrality=np.ones(size, dtype=np.int64),
        options={"node_limit": nodes},
    )
    if found.x is None:
        infeasible = found.status == 2
        return None, 0 if infeasible else nodes
    return frozenset(np.flatnonzero(found.x > 0.5).tolist()), int(found.mip_node_count or 0)
