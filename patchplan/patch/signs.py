"""Polarities: which sign each stage carries, and where a sign has to be turned."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field

from patchplan.patch.signs_graph import Edge, reduced
from patchplan.patch.signs_search import fewest_removals

#: Nodes up to which ties are settled, and how often each polarity is tried the other way.
MOST_TIED, TIE_ROUNDS = 60, 3


@dataclass(frozen=True, slots=True)
class Link:
    """``target`` takes ``source`` with a coefficient of sign ``sign``; start values link to the reference."""

    target: str
    source: str
    sign: int
    is_start: bool = False


@dataclass(frozen=True)
class Signs:
    """Polarity of every node and the sign stages that cover what is left over.

    Attributes
    ----------
    sign
        Node -> +1 or -1.
    inverted
        Nodes that get an inverter.
    summed
        Targets that get an inverting summer in front, for all their links of the wrong sign.
    lower_bound
        Fewest sign stages proved necessary.
    """

    sign: Mapping[str, int]
    inverted: frozenset[str] = field(default_factory=frozenset)
    summed: frozenset[str] = field(default_factory=frozenset)
    lower_bound: int = 0

    @property
    def count(self) -> int:
        """Number of sign stages."""
        return len(self.inverted) + len(self.summed)

    @property
    def proved(self) -> bool:
        """Whether fewer are impossible."""
        return self.count == self.lower_bound


def choose_signs(
    nodes: Sequence[str],
    links: Sequence[Link],
    fixed: Mapping[str, int],
    forced: Iterable[str] = (),
    *,
    node_limit: int = 2000,
    lag_weight: Callable[[str, str], float] | None = None,
) -> Signs:
    """Fewest inverters and inverting summers over all polarities.

    A link is right when sign * s_target * s_source < 0. A wrong one is covered by an inverter on its source or by one
    inverting summer in front of its target. First a two-colouring, which needs none. Else every node is split into
    what it gives and what it takes, two vertices tied to its polarity; a sign stage frees one of them from all its
    links. So the fewest stages are the fewest vertices to take out of a signed graph until no cycle contradicts
    itself: at least one of each such cycle (Barahona and Mahjoub 1989), which a 0/1 linear program decides (HiGHS
    through scipy), whose dual bound is the certificate.

    Parameters
    ----------
    nodes
        All nodes with a polarity.
    links
        Every input that an inverting stage takes, once.
    fixed
        Polarities dictated from outside.
    forced
        Nodes needed in both polarities in any case.
    node_limit
        Branch-and-bound nodes before the search stops with a gap, for about 65 nodes with polarities; fewer of them,
        where one costs less, get more, and more get fewer.
    """
    forced = frozenset(forced)
    links = sorted(set(links), key=lambda x: (x.target, x.source, x.sign, x.is_start))
    sign, clean = _two_colour(nodes, links, fixed)
    if clean:
        return Signs(sign, forced, lower_bound=len(forced))
    inverted, summed, lower = _by_cycles(nodes, [k for k in links if k.source not in forced], fixed, node_limit)
    kept = [k for k in links if k.source not in inverted | forced and (k.is_start or k.target not in summed)]
    sign, _ = _two_colour(nodes, kept, fixed)
    inverted, summed = _cover([k for k in wrong_links(sign, links) if k.source not in forced])
    found = Signs(sign, inverted | forced, summed, lower + len(forced))
    return found if lag_weight is None or len(nodes) > MOST_TIED else _calmed(found, links, fixed, forced, lag_weight)


def _calmed(
    found: Signs,
    links: Sequence[Link],
    fixed: Mapping[str, int],
    forced: frozenset[str],
    lag_weight: Callable[[str, str], float],
) -> Signs:
    """As many sign stages, moved to where their lag costs least."""
    weight = {k: 0.0 if k.is_start else lag_weight(k.target, k.source) for k in links}
    best, cost = found, _lag_cost(found, links, weight)
    for name in [n for n in found.sign if n not in fixed] * TIE_ROUNDS:
        sign = {**best.sign, name: -best.sign[name]}
        inverted, summed = _cover([k for k in wrong_links(sign, links) if k.source not in forced])
        trial = Signs(sign, inverted | forced, summed, found.lower_bound)
        if trial.count <= best.count and _lag_cost(trial, links, weight) < cost * (1 - 1e-9):
            best, cost = trial, _lag_cost(trial, links, weight)
    return best


def _lag_cost(found: Signs, links: Sequence[Link], weight: Mapping[Link, float]) -> float:
    """Sum over the sign stages of what their lag costs in the worst loop that they lie in."""
    cost: dict[tuple[str, str], float] = {}
    for link in wrong_links(found.sign, links):
        stage = ("inverter", link.source) if link.source in found.inverted else ("summer", link.target)
        cost[stage] = max(cost.get(stage, 0.0), weight[link])
    return sum(cost.values())


def wrong_links(sign: Mapping[str, int], links: Iterable[Link]) -> list[Link]:
    """Links whose stage would add where it should subtract."""
    return [k for k in links if k.sign * sign[k.target] * sign[k.source] > 0]


def _two_colour(nodes: Sequence[str], links: Sequence[Link], fixed: Mapping[str, int]) -> tuple[dict[str, int], bool]:
    """Polarities by spreading from the fixed nodes; whether every link came out right."""
    around: dict[str, list[tuple[str, int]]] = {n: [] for n in nodes}
    for link in links:
        around[link.target].append((link.source, -link.sign))
        around[link.source].append((link.target, -link.sign))
    sign = dict(fixed)
    # What is dictated spreads first; only then is there a free choice.
    for roots in ([n for n in nodes if n in fixed], *([n] for n in nodes)):
        queue = deque(roots)
        while queue:
            here = queue.popleft()
            sign.setdefault(here, 1)
            for other, relation in around[here]:
                if other not in sign:
                    sign[other] = relation * sign[here]
                    queue.append(other)
    return sign, not wrong_links(sign, links)


def _by_cycles(
    nodes: Sequence[str], links: Sequence[Link], fixed: Mapping[str, int], node_limit: int
) -> tuple[frozenset[str], frozenset[str], int]:
    """Nodes with an inverter and with a summer after which polarities fit, and how many are needed at least.

    Vertices: what node i gives (i), what it takes (n + i), its polarity (2 n + i), the polarity + itself (3 n).
    """
    n = len(nodes)
    at = {name: i for i, name in enumerate(nodes)}
    # Where a polarity is dictated, it is tied to +, and so with all others that are.
    centre = {name: (3 * n, fixed[name]) if name in fixed else (2 * n + i, 1) for name, i in at.items()}
    edges: list[Edge] = [(vertex + n * part, *centre[name]) for name, vertex in at.items() for part in (0, 1)]
    for link in links:
        taken_by, turn = centre[link.target] if link.is_start else (n + at[link.target], 1)
        edges.append((at[link.source], taken_by, -link.sign * turn))
    pieces, taken = reduced(edges, frozenset(range(2 * n)))
    chosen, lower = set(taken), len(taken)
    for piece in pieces:
        removed, bound = fewest_removals(piece, node_limit)
        chosen.update(piece.names[v] for v in removed)
        lower += bound
    return (
        frozenset(nodes[v] for v in chosen if v < n),
        frozenset(nodes[v - n] for v in chosen if v >= n),
        lower,
    )


def _cover(wrong: Sequence[Link]) -> tuple[frozenset[str], frozenset[str]]:
    """Fewest inverters and summers for links of the wrong sign, inverters where there is a choice.

    A least cover of a bipartite graph is as large as a largest matching (Koenig 1931).
    """
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import maximum_bipartite_matching

    inverted = {k.source for k in wrong if k.is_start}
    targets: dict[str, list[str]] = {}
    for link in wrong:
        if link.source not in inverted:
            targets.setdefault(link.source, []).append(link.target)
    if not targets:
        return frozenset(inverted), frozenset()
    names = sorted({t for group in targets.values() for t in group})
    grid = csr_array([[t in group for t in names] for group in targets.values()], dtype=int)
    matched = maximum_bipartite_matching(grid, perm_type="column")
    taker = {names[t]: source for source, t in zip(targets, matched, strict=True) if t >= 0}
    # What alternating paths reach from the unmatched sources is covered at the targets, the rest at the sources.
    reached = [source for source, t in zip(targets, matched, strict=True) if t < 0]
    summed: set[str] = set()
    for source in reached:
        new = [t for t in targets[source] if t not in summed]
        summed.update(new)
        reached += [taker[t] for t in new if taker[t] not in reached]
    return frozenset(inverted | (targets.keys() - set(reached))), frozenset(summed)
