"""Polarities: which sign each stage carries, and where a sign has to be turned."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np


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


def choose_signs(
    nodes: Sequence[str],
    links: Sequence[Link],
    fixed: Mapping[str, int],
    forced: Iterable[str] = (),
    *,
    node_limit: int = 2000,
) -> Signs:
    """Fewest inverters and inverting summers over all polarities.

    A link is right when sign * s_target * s_source < 0. A wrong one is covered by an inverter on its source or by one
    inverting summer in front of its target. First a two-colouring, which needs none; else a 0/1 linear program
    (HiGHS through scipy), whose dual bound is the certificate.

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
        Branch-and-bound nodes before the search stops with a gap.
    """
    forced = frozenset(forced)
    links = sorted(set(links), key=lambda x: (x.target, x.source, x.sign, x.is_start))
    sign, clean = _two_colour(nodes, links, fixed)
    if clean:
        return Signs(sign, forced, lower_bound=len(forced))
    return _by_program(nodes, links, fixed, forced, node_limit) or _by_cover(sign, links, forced)


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
    queue = deque(n for n in nodes if n in sign)
    for root in nodes:
        if root not in sign:
            sign[root] = 1
            queue.append(root)
        while queue:
            here = queue.popleft()
            for other, relation in around[here]:
                if other not in sign:
                    sign[other] = relation * sign[here]
                    queue.append(other)
    return sign, not wrong_links(sign, links)


def _by_program(
    nodes: Sequence[str], links: Sequence[Link], fixed: Mapping[str, int], forced: frozenset[str], node_limit: int
) -> Signs | None:
    """Exact 0/1 program over s (1 means -), z (inverter on a source) and y (summer in front of a target)."""
    from scipy.optimize import Bounds, LinearConstraint, milp
    from scipy.sparse import coo_array

    n = len(nodes)
    at = {name: i for i, name in enumerate(nodes)}
    target = np.array([at[k.target] for k in links])
    source = np.array([at[k.source] for k in links])
    positive = np.array([k.sign > 0 for k in links])
    no_summer = np.array([k.is_start for k in links])
    count, row = len(links), np.arange(len(links))
    # A positive link is wrong when both polarities agree, a negative one when they differ: two linear bounds each.
    first, second, floor = np.where(positive, 1.0, -1.0), np.ones(count), np.where(positive, 1.0, 0.0)
    loops = target == source
    rows = np.concatenate([np.tile(np.concatenate([row, row + count]), 3), np.concatenate([row, row + count])])
    columns = np.concatenate(
        [
            np.concatenate([target, target]),
            np.concatenate([source, source]),
            np.concatenate([source, source]) + n,
            np.concatenate([target, target]) + 2 * n,
        ]
    )
    cover = np.where(no_summer, 0.0, 1.0)
    values = np.concatenate([first, -first, second, -second, np.ones(2 * count), cover, cover])
    values[: 4 * count][np.tile(loops, 4)] = 0.0
    lowest = np.concatenate([floor, np.where(positive, -1.0, 0.0)])
    self_floor = np.where(positive, 1.0, 0.0)
    lowest[np.tile(loops, 2)] = np.tile(self_floor, 2)[np.tile(loops, 2)]
    matrix = coo_array((values, (rows, columns)), shape=(2 * count, 3 * n)).tocsr()
    low, high = np.zeros(3 * n), np.ones(3 * n)
    for name, polarity in fixed.items():
        low[at[name]] = high[at[name]] = float(polarity < 0)
    if not fixed:
        high[0] = 0.0
    for name in forced:
        low[n + at[name]] = 1.0
    cost = np.concatenate([np.zeros(n), np.ones(n), np.full(n, 1.0 + 1e-6)])
    found = milp(
        cost,
        constraints=LinearConstraint(matrix, lowest, np.inf),
        bounds=Bounds(low, high),
        integrality=np.ones(3 * n, dtype=np.int64),
        options={"node_limit": node_limit},
    )
    if found.x is None:
        return None
    chosen = np.round(found.x).astype(int)
    bound = found.mip_dual_bound if found.mip_dual_bound is not None else 0.0
    return Signs(
        {name: 1 - 2 * int(chosen[i]) for name, i in at.items()},
        frozenset(name for name, i in at.items() if chosen[n + i]),
        frozenset(name for name, i in at.items() if chosen[2 * n + i]),
        max(len(forced), int(np.ceil(bound - 1e-3))),
    )


def _by_cover(sign: Mapping[str, int], links: Sequence[Link], forced: frozenset[str]) -> Signs:
    """Fallback for very large patches: polarities of the colouring, greedy cover of the wrong links."""
    left = [k for k in wrong_links(sign, links) if k.source not in forced]
    inverted: set[str] = set(forced)
    summed: set[str] = set()
    while left:
        tally: dict[tuple[str, bool], int] = {}
        for link in left:
            tally[link.source, True] = tally.get((link.source, True), 0) + 1
            if not link.is_start:
                tally[link.target, False] = tally.get((link.target, False), 0) + 1
        (name, is_source), _ = max(tally.items(), key=lambda item: (item[1], item[0][1], item[0][0]))
        (inverted if is_source else summed).add(name)
        left = [k for k in left if (k.source if is_source else k.target) != name]
    return Signs(dict(sign), frozenset(inverted), frozenset(summed), max(1, len(forced)))
