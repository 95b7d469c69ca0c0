"""Polarities where multipliers have no differential inputs, so that factors dictate the polarity of their product."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from math import ceil
from typing import TypeAlias

import numpy as np

from patchplan.patch.signs import Link, Signs, choose_signs

#: What summers cost more than inverters, over all of them, so that inverters win where there is a choice.
_TIE = 1e-3
#: Columns with their factors, and what their sum is at least.
_Row: TypeAlias = tuple[dict[int, int], int]


@dataclass(frozen=True, slots=True)
class Product:
    """``node`` carries ``left`` times ``right``, with the product of the polarities that its multiplier takes."""

    node: str
    left: str
    right: str


def wrong_products(sign: Mapping[str, int], products: Iterable[Product]) -> list[Product]:
    """Products whose polarity is not that of their factors as they come."""
    return [p for p in products if sign[p.node] * sign[p.left] * sign[p.right] < 0]


def choose_signs_of_products(
    nodes: Sequence[str],
    links: Sequence[Link],
    products: Sequence[Product],
    fixed: Mapping[str, int],
    forced: Iterable[str] = (),
    *,
    node_limit: int = 2000,
) -> Signs:
    """Fewest inverters and inverting summers where a wrong product needs an inverter on one of its factors.

    The fewest without products are fewer or as many, so that they are a lower bound, and with an inverter for each
    wrong product they are a plan. Where the two differ, a 0/1 linear program decides.

    Parameters
    ----------
    nodes, links, fixed, forced, node_limit
        As for :func:`patchplan.patch.signs.choose_signs`.
    """
    links = sorted(set(links), key=lambda x: (x.target, x.source, x.sign, x.is_start))
    forced = frozenset(forced)
    found = choose_signs(nodes, links, fixed, forced, node_limit=node_limit)
    inverted = set(found.inverted)
    for product in wrong_products(found.sign, products):
        if not inverted & {product.left, product.right}:
            inverted.add(product.left)
    found = replace(found, inverted=frozenset(inverted))
    if found.proved:
        return found
    better, lower = _program(nodes, links, products, fixed, forced, node_limit)
    best = min([found, better] if better else [found], key=lambda signs: signs.count)
    return replace(best, lower_bound=max(found.lower_bound, lower))


def _program(
    nodes: Sequence[str],
    links: Sequence[Link],
    products: Sequence[Product],
    fixed: Mapping[str, int],
    forced: frozenset[str],
    node_limit: int,
) -> tuple[Signs | None, int]:
    """Best signs found and the fewest sign stages proved necessary (HiGHS through scipy).

    A bit for each polarity, inverter and summer. A link asks that two polarities are equal or differ, a product that
    one is the exclusive or of two, unless a sign stage frees it.
    """
    from scipy.optimize import Bounds, LinearConstraint, milp
    from scipy.sparse import csr_array

    n = len(nodes)
    at = {name: i for i, name in enumerate(nodes)}
    rows = [row for link in links for row in _link_rows(link, at)]
    rows += [row for product in products for row in _product_rows(product, at)]
    entries = [(i, column, factor) for i, (factors, _) in enumerate(rows) for column, factor in factors.items()]
    row, column, factor = np.array(entries).T
    low, high = np.zeros(3 * n), np.ones(3 * n)
    for name, polarity in fixed.items():
        low[at[name]] = high[at[name]] = polarity < 0
    low[[n + at[name] for name in sorted(forced)]] = 1
    found = milp(
        np.repeat([0.0, 1.0, 1.0 + _TIE / n], n),
        constraints=LinearConstraint(
            csr_array((factor, (row, column)), shape=(len(rows), 3 * n)), [a for _, a in rows]
        ),
        bounds=Bounds(low, high),
        integrality=np.ones(3 * n, dtype=np.int64),
        options={"node_limit": max(1, node_limit)},
    )
    bound = found.mip_dual_bound
    lower = ceil(bound - 2 * _TIE) if bound is not None and np.isfinite(bound) else 0
    if found.x is None:
        return None, lower
    negative, inverted, summed = (
        frozenset(nodes[i] for i in np.flatnonzero(bits).tolist()) for bits in found.x.reshape(3, n) > 0.5
    )
    return Signs({name: -1 if name in negative else 1 for name in nodes}, inverted, summed), lower


def _link_rows(link: Link, at: Mapping[str, int]) -> Iterator[_Row]:
    n, target, source = len(at), at[link.target], at[link.source]
    free = {n + source: 1} | ({} if link.is_start else {2 * n + target: 1})
    if target == source:
        yield free, 1 if link.sign > 0 else 0
    elif link.sign > 0:
        yield {target: 1, source: 1, **free}, 1
        yield {target: -1, source: -1, **free}, -1
    else:
        yield {target: 1, source: -1, **free}, 0
        yield {target: -1, source: 1, **free}, 0


def _product_rows(product: Product, at: Mapping[str, int]) -> Iterator[_Row]:
    """The four facets of an exclusive or; a square is + or needs an inverter."""
    n, made, left, right = len(at), at[product.node], at[product.left], at[product.right]
    free = {n + left: 1, n + right: 1}
    if left == right:
        yield {made: -1, n + left: 1}, 0
        return
    yield {made: -1, left: 1, right: 1, **free}, 0
    yield {made: 1, left: -1, right: 1, **free}, 0
    yield {made: 1, left: 1, right: -1, **free}, 0
    yield {made: -1, left: -1, right: -1, **free}, -2
