"""Fewest sign stages, against brute force over all polarities with an independent vertex cover (Koenig's theorem)."""

from __future__ import annotations

from fractions import Fraction
from itertools import product

import numpy as np
import pytest
from scipy.sparse import csr_array
from scipy.sparse.csgraph import maximum_bipartite_matching

from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.signs import Link, choose_signs, wrong_links
from patchplan.patch.signs_ties import lag_weight
from tests.patch.random_links import three_a_row
from tests.systems import companion, system, term


def brute_force(names: list[str], links: list[Link], fixed: dict[str, int], forced: set[str]) -> int:
    """Least cover over all polarities: a bipartite cover is as large as the largest matching (Koenig 1931)."""
    best = 2 * len(names)
    at = {n: i for i, n in enumerate(names)}
    free = [n for n in names if n not in fixed]
    for signs in product((1, -1), repeat=len(free)):
        wrong = wrong_links({**fixed, **dict(zip(free, signs, strict=True))}, links)
        inverted = forced | {k.source for k in wrong if k.is_start}
        grid = np.zeros((len(names), len(names)))
        for link in wrong:
            if link.source not in inverted:
                grid[at[link.source], at[link.target]] = 1
        matched = maximum_bipartite_matching(csr_array(grid), perm_type="column")
        best = min(best, len(inverted) + int((matched >= 0).sum()))
    return best


def random_case(seed: int) -> tuple[list[str], list[Link], dict[str, int], set[str]]:
    """Up to nine nodes; a quarter of the seeds without dictated polarities, half with forced inverters, some starts."""
    random = np.random.default_rng(seed)
    names = [f"x{i}" for i in range(int(random.integers(2, 10)))]
    pairs = {(t, str(s)) for t in names for s in random.choice(names, int(random.integers(1, 5)))}
    links = [Link(t, s, int(random.choice([-1, 1]))) for t, s in sorted(pairs)]
    fixed: dict[str, int] = {}
    forced: set[str] = set()
    if seed % 4:
        fixed = {n: int(random.choice([-1, 1])) for n in names if random.random() < 0.3}
    if seed % 4 >= 2:
        forced = {n for n in names if random.random() < 0.15}
    if seed % 4 == 3:
        fixed["x0"] = 1
        links += [Link(n, "x0", int(random.choice([-1, 1])), True) for n in names[1:] if random.random() < 0.5]
    return names, links, fixed, forced


@pytest.mark.parametrize("seed", range(60))
def test_against_brute_force(seed):
    names, links, fixed, forced = random_case(seed)
    found = choose_signs(names, links, fixed, forced)
    assert found.count == found.lower_bound == brute_force(names, links, fixed, forced)
    assert found.proved
    assert found.inverted >= forced
    assert {n: found.sign[n] for n in fixed} == fixed
    assert not uncovered(links, found)


def uncovered(links, found):
    """Wrong links without a sign stage."""
    wrong = wrong_links(found.sign, links)
    return [k for k in wrong if k.source not in found.inverted and (k.is_start or k.target not in found.summed)]


@pytest.mark.parametrize("order", [2, 3, 6, 9, 40])
def test_companion_form_needs_one(order):
    patch = build_patch(Form(companion(order)))
    assert patch.sign_stages == patch.sign_stages_lower_bound == 1


def test_dictated_polarity_is_kept():
    found = choose_signs(["a", "b"], [Link("a", "b", 1)], {"a": 1, "b": 1})
    assert found.sign == {"a": 1, "b": 1}
    assert found.lower_bound == 1


def test_dictated_polarity_reaches_nodes_named_before_it():
    found = choose_signs(["a", "b"], [Link("b", "a", 1)], {"b": 1})
    assert found.sign == {"a": -1, "b": 1}
    assert found.count == 0


def test_inverter_wins_over_summer_among_equals():
    found = choose_signs(["a", "b"], [Link("a", "b", 1)], {"a": 1, "b": 1})
    assert (found.inverted, found.summed) == ({"b"}, set())


def test_ring_of_integrators_needs_one_however_long():
    """An odd number of inverting stages in a ring turns the sign once too often or not at all."""
    names = [f"x{i}" for i in range(301)]
    links = [Link(b, a, 1) for a, b in zip(names, names[1:] + names[:1], strict=True)]
    found = choose_signs(names, links, {})
    assert found.count == found.lower_bound == 1


@pytest.mark.parametrize("seed", range(4))
def test_medium_random_systems_are_proved(seed):
    names, links = three_a_row(20, seed)
    found = choose_signs(names, links, {})
    assert found.proved
    assert not uncovered(links, found)


def test_search_that_stops_early_states_a_gap():
    names, links = three_a_row(50, 0)
    found = choose_signs(names, links, {}, node_limit=0)
    assert 0 < found.lower_bound < found.count < 1.5 * found.lower_bound
    assert not found.proved
    assert not uncovered(links, found)


def test_same_input_gives_the_same_plan():
    names, links = three_a_row(20, 6)
    assert choose_signs(names, links, {}) == choose_signs(names, links[::-1], {})


def test_among_equals_the_stage_stands_in_the_slower_loop():
    """b, d and c make a loop of rate 1000, c and a one of rate 32; the sign can be turned in either.

    Without weights the second stage is an inverter on c, which lies in the fast loop; a summer in front of c, for what
    a and d give, is as many stages.
    """
    rows = {
        "a": [term(-1, "a"), term(1, "c"), term(1, "d")],
        "b": [term(-1, "b"), term(1000, "c"), term(1, "d")],
        "c": [term(-1000, "a"), term(-1, "c"), term(1000, "d")],
        "d": [term(-1000, "b"), term(-1, "c"), term(-1, "d")],
    }
    made = system(dict.fromkeys(rows, 0), rows)
    links = [Link(n, t.factors[0][0], 1 if t.coefficient > 0 else -1) for n, terms in rows.items() for t in terms]
    plain = choose_signs(list(rows), links, {})
    patch = build_patch(Form(made))
    assert patch.sign_stages == plain.count == 2
    assert "c" in plain.inverted
    assert {s.signal for s in patch.stages if s.kind in ("inverter", "summer")} == {"b", "part of c"}


def test_lag_weight_is_rate_times_q_of_the_shortest_loop():
    one = Fraction(1)
    inputs = {"x": [("v", one)], "v": [("x", -400 * one), ("v", -2 * one), ("u", one)], "y": [("v", one)]}
    states = frozenset(inputs)
    # w = sqrt(400) = 20, mean damping (0 + 2)/2 = 1, so that Q = 20 and the weight 400.
    assert lag_weight("v", "x", inputs, states) == pytest.approx(400)
    assert lag_weight("v", "v", inputs, states) == pytest.approx(2)
    assert lag_weight("y", "v", inputs, states) == 0
    assert lag_weight("v", "u", inputs, states) == 0
