"""The polarity problem as a graph: fewest vertices to take out so that polarities fit along every edge that stays."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

#: (vertex, vertex, +1 where both polarities must agree and -1 where they must differ).
Edge: TypeAlias = tuple[int, int, int]
_SAME, _OPPOSITE = 1, 2


@dataclass(frozen=True)
class SignedGraph:
    """A connected piece, each vertex with three edges or more.

    Attributes
    ----------
    names
        Vertex numbers of the whole graph, ascending.
    first, second
        Ends of the edges, as places in ``names``; ``(n_edges,)``.
    same
        Whether the ends must agree; ``(n_edges,)``. Two edges between the same ends disagree with each other.
    removable
        Whether a vertex may be taken out; ``(n_vertices,)``.
    """

    names: tuple[int, ...]
    first: NDArray[np.intp]
    second: NDArray[np.intp]
    same: NDArray[np.bool_]
    removable: NDArray[np.bool_]

    @property
    def size(self) -> int:
        """Number of vertices."""
        return len(self.names)

    def neighbours(self) -> list[list[tuple[int, int]]]:
        """(Place of the other end, relation) of every vertex's edges."""
        around: list[list[tuple[int, int]]] = [[] for _ in self.names]
        for u, v, same in zip(self.first.tolist(), self.second.tolist(), self.same.tolist(), strict=True):
            around[u].append((v, 1 if same else -1))
            around[v].append((u, 1 if same else -1))
        return around


def reduced(edges: Iterable[Edge], removable: frozenset[int]) -> tuple[list[SignedGraph], frozenset[int]]:
    """Take away what can be decided at once; the fewest removals of the rest and of the whole differ by those made.

    Parameters
    ----------
    edges
        Relations between vertices.
    removable
        Vertices that may be taken out, at a cost of one each.

    Returns
    -------
    tuple
        Connected pieces left, and the vertices taken out.
    """
    around = _Around(removable)
    for first, second, relation in edges:
        around.join(first, second, relation)
    around.reduce()
    pieces = [_piece(part, around.of, removable) for part in _components(around.of)]
    return pieces, frozenset(around.taken)


class _Around:
    """Neighbours of every vertex while the graph shrinks."""

    def __init__(self, removable: frozenset[int]) -> None:
        self.of: dict[int, dict[int, int]] = {}
        self.taken: set[int] = set()
        self.removable = removable
        self.touched: dict[int, None] = {}

    def join(self, first: int, second: int, relation: int) -> None:
        mask = _SAME if relation > 0 else _OPPOSITE
        for here, there in ((first, second), (second, first)):
            others = self.of.setdefault(here, {})
            others[there] = others.get(there, 0) | mask
            self.touched[here] = None

    def drop(self, vertex: int) -> None:
        for other in self.of.pop(vertex):
            self.of[other].pop(vertex)
            self.touched[other] = None

    def take(self, vertex: int) -> None:
        self.drop(vertex)
        self.taken.add(vertex)

    def reduce(self) -> None:
        """Drop vertices with one edge; replace one with two by an edge, since taking out its neighbour is as good."""
        while self.touched:
            vertex = next(iter(self.touched))
            del self.touched[vertex]
            others = list(self.of.get(vertex, {}).items())
            if not others or (len(others) == 1 and others[0][1] != _SAME | _OPPOSITE):
                if vertex in self.of:
                    self.drop(vertex)
            elif len(others) == 1:
                self.take(others[0][0] if others[0][0] in self.removable else vertex)
            elif len(others) == 2 and all(mask != _SAME | _OPPOSITE for _, mask in others):
                self._bypass(vertex, *others)

    def _bypass(self, vertex: int, first: tuple[int, int], second: tuple[int, int]) -> None:
        if vertex in self.removable and first[0] not in self.removable and second[0] not in self.removable:
            return
        self.drop(vertex)
        self.join(first[0], second[0], 1 if first[1] == second[1] else -1)


def _components(around: Mapping[int, Mapping[int, int]]) -> list[list[int]]:
    """Connected pieces, vertices ascending."""
    seen: set[int] = set()
    pieces = []
    for root in sorted(around):
        if root in seen:
            continue
        seen.add(root)
        piece = [root]
        for here in piece:
            new = [v for v in around[here] if v not in seen]
            seen.update(new)
            piece += new
        pieces.append(sorted(piece))
    return pieces


def _piece(names: list[int], around: Mapping[int, Mapping[int, int]], removable: frozenset[int]) -> SignedGraph:
    at = {name: i for i, name in enumerate(names)}
    edges = [
        (at[u], at[v], sign == _SAME)
        for u in names
        for v, mask in sorted(around[u].items())
        for sign in (_SAME, _OPPOSITE)
        if u < v and mask & sign
    ]
    first, second, same = zip(*edges, strict=True)
    return SignedGraph(
        tuple(names),
        np.array(first, dtype=np.intp),
        np.array(second, dtype=np.intp),
        np.array(same, dtype=np.bool_),
        np.array([n in removable for n in names], dtype=np.bool_),
    )
