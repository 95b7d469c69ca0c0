"""Fewest sign stages with multipliers that have no differential inputs: count, proved bound and time on one core."""

from __future__ import annotations

import time

import numpy as np

from patchplan.patch.signs import Link, choose_signs
from patchplan.patch.signs_products import Product, choose_signs_of_products
from patchplan.pipeline import SIGN_NODES
from tests.patch.random_links import three_a_row

SEEDS = 4


def main() -> None:
    """Damped random states with three entries a row, and half as many products, each taken by one of them."""
    choose_signs(*three_a_row(10, 1), {})  # loads scipy
    for count in (10, 20, 30):
        for seed in range(SEEDS):
            names, links = three_a_row(count, seed, damped=True)
            random = np.random.default_rng(seed)
            products = [Product(f"p{i}", *(str(n) for n in random.choice(names, 2))) for i in range(count // 2)]
            links += [Link(str(random.choice(names)), p.node, int(random.choice([-1, 1]))) for p in products]
            nodes = [*names, *(p.node for p in products)]
            begin = time.process_time()
            found = choose_signs_of_products(nodes, links, products, {}, node_limit=SIGN_NODES["normal"])
            seconds = time.process_time() - begin
            print(
                f"{count:3} states, {len(products):2} products, seed {seed}: {found.count:2} sign stages, at least "
                f"{found.lower_bound:2}, {seconds:5.2f} s",
                flush=True,
            )


if __name__ == "__main__":
    main()
