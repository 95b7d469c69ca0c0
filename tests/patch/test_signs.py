"""Fewest sign stages, against brute force over all polarities with an independent vertex cover (Koenig's theorem)."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from scipy.sparse import csr_array
from scipy.sparse.csgraph import maximum_bipartite_matching

from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.signs import Link, choose_signs, wrong_links
from tests.systems import companion


def brute_force(names: list[str], links: list[Link]) -> int:
    """Least cover over all polarities: a bipartite cover is as large as the largest matching (Koenig 1931)."""
    best = len(links)
    at = {n: i for i, n in enumerate(names)}
    for signs in product((1, -1), repeat=len(names) - 1):
        sign = dict(zip(names, (1, *signs), strict=True))
        wrong = wrong_links(sign, links)
        grid = np.zeros((len(names), len(names)))
        for link in wrong:
            grid[at[link.source], at[link.target]] = 1
        matched = maximum_bipartite_matching(csr_array(grid), perm_type="column")
        best = min(best, int((matched >= 0).sum()))
    return best


@pytest.mark.parametrize("seed", range(12))
def test_against_brute_force(seed):
    random = np.random.default_rng(seed)
    count = int(random.integers(3, 9))
    names = [f"x{i}" for i in range(count)]
    pairs = {(int(i), int(j)) for i in range(count) for j in random.integers(0, count, 3)}
    links = [Link(names[i], names[j], int(random.choice([-1, 1]))) for i, j in sorted(pairs)]
    found = choose_signs(names, links, {})
    assert len(found.inverted) + len(found.summed) == found.lower_bound == brute_force(names, links)
    left = [
        k for k in wrong_links(found.sign, links) if k.source not in found.inverted and k.target not in found.summed
    ]
    assert not left


@pytest.mark.parametrize("order", [2, 3, 6, 9])
def test_companion_form_needs_one(order):
    patch = build_patch(Form(companion(order)))
    assert patch.sign_stages == patch.sign_stages_lower_bound == 1


def test_dictated_polarity_is_kept():
    found = choose_signs(["a", "b"], [Link("a", "b", 1)], {"a": 1, "b": 1})
    assert found.sign == {"a": 1, "b": 1}
    assert found.lower_bound == 1
