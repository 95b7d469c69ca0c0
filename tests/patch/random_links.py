"""Random sign problems for the test and the benchmark of the sign search."""

from __future__ import annotations

import numpy as np

from patchplan.patch.signs import Link


def three_a_row(count: int, seed: int, *, damped: bool = False) -> tuple[list[str], list[Link]]:
    """Each of ``count`` states takes three states with random signs, itself always among them where damped."""
    random = np.random.default_rng(seed)
    names = [f"x{i}" for i in range(count)]
    links = []
    for target in names:
        others = [n for n in names if n != target] if damped else names
        sources = random.choice(others, 2 if damped else 3, replace=False).tolist()
        links += [Link(target, s, int(random.choice([-1, 1]))) for s in sources]
        if damped:
            links.append(Link(target, target, -1))
    return names, links
