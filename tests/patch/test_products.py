"""Fewest multipliers, against known addition chains and an independent exhaustive search."""

from __future__ import annotations

from itertools import combinations_with_replacement

import pytest

from patchplan.patch.products import cascade, plan_products, times

# Lengths of shortest addition chains l(n), OEIS A003313 (from memory): a power x^n needs l(n) multipliers.
CHAINS = {2: 1, 3: 2, 4: 2, 5: 3, 6: 3, 7: 4, 8: 3, 9: 4, 10: 4, 12: 4, 15: 5, 16: 4}


def power(n):
    return (("x", n),)


@pytest.mark.parametrize(("exponent", "length"), CHAINS.items())
def test_powers_take_shortest_addition_chains(exponent, length):
    assert len(plan_products([power(exponent)])) == length


def exhaustive(wanted, most):
    """Fewest multipliers by trying every product of two things that are there, by deepening."""
    names = sorted({n for m in wanted for n, _ in m})
    top = {n: max(dict(m).get(n, 0) for m in wanted) for n in names}

    def search(there, left):
        if all(m in there for m in wanted):
            return True
        if left == 0:
            return False
        made = {times(a, b) for a, b in combinations_with_replacement(sorted(there), 2)}
        fits = (m for m in made - there if all(p <= top[n] for n, p in m))
        return any(search(there | {m}, left - 1) for m in sorted(fits))

    signals = frozenset(((n, 1),) for n in names)
    return next(count for count in range(most + 1) if search(signals, count))


SETS = [
    [(("x", 2),), (("x", 2), ("y", 1)), (("x", 1), ("y", 1))],
    [(("x", 1), ("y", 1), ("z", 1)), (("y", 1), ("z", 1))],
    [(("x", 3),), (("x", 2), ("y", 1)), (("x", 1), ("y", 2))],
    [(("x", 2), ("y", 2)), (("x", 1), ("y", 2))],
    [(("w", 1), ("x", 1), ("y", 1)), (("x", 1), ("y", 1), ("z", 1))],
]


@pytest.mark.parametrize("wanted", SETS)
def test_small_sets_against_exhaustive_search(wanted):
    plan = plan_products(wanted)
    assert len(plan) == exhaustive(wanted, len(plan))


@pytest.mark.parametrize("wanted", SETS)
def test_each_product_is_made_from_what_is_there(wanted):
    there = {((n, 1),) for m in wanted for n, _ in m}
    for made, left, right in plan_products(wanted):
        assert left in there
        assert right in there
        assert times(left, right) == made
        there.add(made)
    assert set(wanted) <= there


def test_less_cascade_depth_wins_among_equals():
    """x^7 in four multipliers: by 2, 3, 5 through four in a row, by 2, 3, 4 through three."""
    assert cascade(plan_products([power(7)])) == 3


def test_cascade_counts_multipliers_in_a_row():
    x = (("x", 1),)
    assert cascade([(power(2), x, x), (power(3), power(2), x), (power(4), power(2), power(2))]) == 2
