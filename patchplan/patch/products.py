"""Which multipliers make the products that the equations ask for."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from itertools import chain, combinations, islice, product

from patchplan.equation.system import Monomial

#: Sets of helping products that are tried before the greedy plan is taken.
MOST_SETS = 3000


def degree(monomial: Monomial) -> int:
    """Number of signals multiplied."""
    return sum(power for _, power in monomial)


def times(left: Monomial, right: Monomial) -> Monomial:
    """Product of two monomials."""
    powers = dict(left)
    for name, power in right:
        powers[name] = powers.get(name, 0) + power
    return tuple(sorted(powers.items()))


def plan_products(needed: Iterable[Monomial]) -> list[tuple[Monomial, Monomial, Monomial]]:
    """Multipliers (product, left, right) that make every needed monomial, each built once and before its use.

    Products of lower degree come first, so that higher ones are split into what is there already; among equals the
    split of least cascade depth wins, since a product of products loses headroom and adds lag. Where that builds more
    than the needed products themselves, all smaller sets of helping products are tried, as far as :data:`MOST_SETS`.
    """
    wanted = sorted({m for m in needed if degree(m) > 1}, key=lambda m: (degree(m), m))
    made = _build(wanted)
    for helping in _helping_sets(wanted, len(made) - len(wanted)):
        trial = _build(sorted({*wanted, *helping}, key=lambda m: (degree(m), m)))
        if len(trial) == len(wanted) + len(helping):
            return trial
    return made


def _build(wanted: Iterable[Monomial]) -> list[tuple[Monomial, Monomial, Monomial]]:
    depth: dict[Monomial, int] = {}
    made: list[tuple[Monomial, Monomial, Monomial]] = []
    for monomial in wanted:
        _make(monomial, depth, made)
    return made


def _helping_sets(wanted: list[Monomial], fewer_than: int) -> Iterator[tuple[Monomial, ...]]:
    """Sets of products that are not wanted but divide wanted ones, smallest first, fewer than a given number."""
    divisors = {d for m in wanted for split in _splits(m) for d in split if degree(d) > 1} - set(wanted)
    ordered = sorted(divisors, key=lambda m: (degree(m), m))
    sets = chain.from_iterable(combinations(ordered, size) for size in range(1, fewer_than))
    return islice(sets, MOST_SETS)


def _make(monomial: Monomial, depth: dict[Monomial, int], made: list[tuple[Monomial, Monomial, Monomial]]) -> None:
    if degree(monomial) < 2 or monomial in depth:
        return
    left, right = min(_splits(monomial), key=lambda s: _cost(s, depth))
    _make(left, depth, made)
    _make(right, depth, made)
    depth[monomial] = 1 + max(depth.get(left, 0), depth.get(right, 0))
    made.append((monomial, left, right))


def _cost(split: tuple[Monomial, Monomial], depth: dict[Monomial, int]) -> tuple[int, int, tuple[Monomial, Monomial]]:
    """(new multipliers at least, cascade depth, the split itself as the last tie break)."""
    unmade = {m for m in split if degree(m) > 1 and m not in depth}
    deepest = max(depth.get(m, degree(m) - 1) for m in split)
    return sum(degree(m) - 1 for m in unmade), deepest, split


def _splits(monomial: Monomial) -> Iterator[tuple[Monomial, Monomial]]:
    """All ways to write a monomial as an ordered pair left <= right of smaller ones."""
    names = [name for name, _ in monomial]
    powers = [power for _, power in monomial]
    for taken in product(*(range(p + 1) for p in powers)):
        left = tuple((n, k) for n, k in zip(names, taken, strict=True) if k)
        right = tuple((n, p - k) for n, p, k in zip(names, powers, taken, strict=True) if p - k)
        if left and right and (degree(left), left) <= (degree(right), right):
            yield left, right
