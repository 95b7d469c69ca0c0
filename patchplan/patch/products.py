"""Which multipliers make the products that the equations ask for."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from functools import lru_cache
from itertools import chain, combinations, islice, product

from patchplan.equation.system import Monomial

#: Sets of helping products that are tried before the greedy plan is taken.
MOST_SETS = 3000


@lru_cache(maxsize=4096)
def degree(monomial: Monomial) -> int:
    """Number of signals multiplied."""
    return sum(power for _, power in monomial)


def times(left: Monomial, right: Monomial) -> Monomial:
    """Product of two monomials."""
    powers = dict(left)
    for name, power in right:
        powers[name] = powers.get(name, 0) + power
    return tuple(sorted(powers.items()))


def plan_products(
    needed: Iterable[Monomial], *, most_sets: int = MOST_SETS
) -> list[tuple[Monomial, Monomial, Monomial]]:
    """Multipliers (product, left, right) that make every needed monomial, each built once and before its use.

    Products of lower degree come first, so that higher ones are split into what is there already. Where that builds
    more than the needed products themselves, all sets of helping products that are no larger are tried, up to
    ``most_sets``. Among equals the plan of least cascade depth wins, since a product of products loses headroom and
    adds lag.
    """
    wanted = sorted({m for m in needed if degree(m) > 1}, key=lambda m: (degree(m), m))
    best = _build(wanted)
    for helping in islice(_helping_sets(wanted, len(best) - len(wanted)), most_sets):
        if len(wanted) + len(helping) > len(best):
            break
        trial = _build(sorted({*wanted, *helping}, key=lambda m: (degree(m), m)))
        if len(trial) == len(wanted) + len(helping):
            best = min(best, trial, key=lambda made: (len(made), cascade(made)))
    return best


def cascade(made: Iterable[tuple[Monomial, Monomial, Monomial]]) -> int:
    """Most multipliers that a signal passes one after the other."""
    depth: dict[Monomial, int] = {}
    for monomial, left, right in made:
        depth[monomial] = 1 + max(depth.get(left, 0), depth.get(right, 0))
    return max(depth.values(), default=0)


def _build(wanted: Iterable[Monomial]) -> list[tuple[Monomial, Monomial, Monomial]]:
    depth: dict[Monomial, int] = {}
    made: list[tuple[Monomial, Monomial, Monomial]] = []
    for monomial in wanted:
        _make(monomial, depth, made)
    return made


def _helping_sets(wanted: list[Monomial], most: int) -> Iterator[tuple[Monomial, ...]]:
    """Sets of products that are not wanted but divide wanted ones, smallest first, no more than a given number."""
    divisors = {d for m in wanted for split in _splits(m) for d in split if degree(d) > 1} - set(wanted)
    ordered = sorted(divisors, key=lambda m: (degree(m), m))
    return chain.from_iterable(combinations(ordered, size) for size in range(1, most + 1))


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
    left, right = split
    first, second = degree(left) - 1, degree(right) - 1
    unmade = (first if left not in depth else 0) + (second if right not in depth and right != left else 0)
    return unmade, max(depth.get(left, first), depth.get(right, second)), split


@lru_cache(maxsize=4096)
def _splits(monomial: Monomial) -> tuple[tuple[Monomial, Monomial], ...]:
    """All ways to write a monomial as an ordered pair left <= right of smaller ones."""
    names = [name for name, _ in monomial]
    powers = [power for _, power in monomial]
    found = []
    for taken in product(*(range(p + 1) for p in powers)):
        left = tuple((n, k) for n, k in zip(names, taken, strict=True) if k)
        right = tuple((n, p - k) for n, p, k in zip(names, powers, taken, strict=True) if p - k)
        if left and right and (degree(left), left) <= (degree(right), right):
            found.append((left, right))
    return tuple(found)
