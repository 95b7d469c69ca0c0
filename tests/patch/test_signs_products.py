"""Fewest sign stages where multipliers dictate the polarity of their product, against brute force over everything."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations, product

import numpy as np
import pytest

from patchplan.equation.system import System
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.read_back import read_back
from patchplan.patch.signs import Link, wrong_links
from patchplan.patch.signs_products import Product, choose_signs_of_products, wrong_products
from tests.systems import lorenz, system, term, van_der_pol


def fits(
    sign: dict[str, int], links: list[Link], products: list[Product], inverted: set[str], summed: set[str]
) -> bool:
    """Whether stages cover every link and product of the wrong sign."""
    left = [k for k in wrong_links(sign, links) if k.source not in inverted]
    turned = all(inverted & {p.left, p.right} for p in wrong_products(sign, products))
    return turned and all(k.target in summed and not k.is_start for k in left)


def brute_force(
    names: list[str], links: list[Link], products: list[Product], fixed: dict[str, int], forced: set[str]
) -> int:
    """Least number of stages over all polarities and all sets of stages."""
    stages = [(kind, n) for n in names for kind in ("inverter", "summer")]
    free = [n for n in names if n not in fixed]
    signs = [{**fixed, **dict(zip(free, s, strict=True))} for s in product((1, -1), repeat=len(free))]
    for count in range(len(names) + 1):
        for chosen in combinations(stages, count):
            inverted = {n for kind, n in chosen if kind == "inverter"}
            summed = {n for kind, n in chosen if kind == "summer"}
            if inverted >= forced and any(fits(sign, links, products, inverted, summed) for sign in signs):
                return count
    raise AssertionError("an inverter on every node covers all")


def random_case(seed: int) -> tuple[list[str], list[Link], list[Product], dict[str, int], set[str]]:
    """Two to four states and one to three products of two nodes before them, each taken somewhere."""
    random = np.random.default_rng(seed)
    states = [f"x{i}" for i in range(int(random.integers(2, 5)))]
    names, products = list(states), []
    for i in range(int(random.integers(1, 4))):
        left, right = (str(n) for n in random.choice(names, 2))
        products.append(Product(f"p{i}", left, right))
        names.append(f"p{i}")
    pairs = {(t, str(s)) for t in states for s in random.choice(names, 2)}
    pairs |= {(str(random.choice(states)), p.node) for p in products}
    links = [Link(t, s, int(random.choice([-1, 1]))) for t, s in sorted(pairs)]
    fixed = {n: int(random.choice([-1, 1])) for n in names if random.random() < 0.2 * (seed % 3)}
    forced = {n for n in names if random.random() < 0.1} if seed % 2 else set()
    if seed % 5 == 0:
        fixed["x0"] = 1
        links += [Link(n, "x0", int(random.choice([-1, 1])), True) for n in states[1:]]
    return names, links, products, fixed, forced


@pytest.mark.parametrize("seed", range(30))
def test_against_brute_force(seed):
    names, links, products, fixed, forced = random_case(seed)
    found = choose_signs_of_products(names, links, products, fixed, forced)
    assert found.count == found.lower_bound == brute_force(names, links, products, fixed, forced)
    assert fits(dict(found.sign), links, products, set(found.inverted), set(found.summed))
    assert found.inverted >= forced
    assert {n: found.sign[n] for n in fixed} == fixed


def test_a_negative_square_takes_an_inverter_whatever_the_polarity_of_its_factor():
    """x as +x asks for x^2 as -x^2, and neither +x nor -x alone gives that."""
    links = [Link("x", "p", 1)]
    found = choose_signs_of_products(["x", "p"], links, [Product("p", "x", "x")], {"x": 1})
    assert (found.count, found.lower_bound, found.inverted) == (1, 1, {"x"})


def test_search_that_stops_early_states_a_gap():
    random = np.random.default_rng(0)
    states = [f"x{i}" for i in range(40)]
    products = [Product(f"p{i}", *(str(n) for n in random.choice(states, 2))) for i in range(40)]
    links = [Link(x, f"p{i}", int(random.choice([-1, 1]))) for i, x in enumerate(states)]
    links += [Link(x, str(random.choice(states)), int(random.choice([-1, 1]))) for x in states]
    found = choose_signs_of_products([*states, *(p.node for p in products)], links, products, {}, node_limit=1)
    assert found.lower_bound <= found.count
    assert fits(dict(found.sign), links, products, set(found.inverted), set(found.summed))


@pytest.mark.parametrize(
    "made",
    [
        van_der_pol(),
        lorenz(),
        system(
            {"x": 1, "y": 1}, {"x": [term(-1, "x", "x"), term(1, "y")], "y": [term(1, "x", "y", "y"), term(-1, "y")]}
        ),
    ],
)
def test_patch_reads_back_with_signs_that_its_multipliers_can_give(made: System):
    free, bound = build_patch(Form(made)), build_patch(Form(made), differential=False)
    found = read_back(bound, ())
    assert [found[row.name] for row in made.rows] == list(made.rows)
    assert bound.sign_stages == bound.sign_stages_lower_bound >= free.sign_stages
    assert bound.counts()["multiplier"] == free.counts()["multiplier"]


def test_read_back_refuses_a_sign_that_a_multiplier_cannot_give():
    needs_sign = system({"x": 1}, {"x": [term(1, "x", "x", "x")]})
    free = build_patch(Form(needs_sign))
    wrong = [s for s in free.stages if s.kind == "multiplier"]
    turned = replace(free, differential=False, stages=tuple(
        replace(s, sign=-s.sign) if s == wrong[0] else s for s in free.stages
    ))  # fmt: skip
    with pytest.raises(ValueError, match="cannot turn the sign"):
        read_back(turned, ())
