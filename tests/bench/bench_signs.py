"""Fewest sign stages of random systems with three entries a row: count, proved bound, gap and time on one core."""

from __future__ import annotations

import sys
import time

from patchplan.patch.signs import choose_signs
from patchplan.pipeline import SIGN_NODES
from tests.patch.random_links import three_a_row

SEEDS = 12


def main() -> None:
    """One line for each system; the level of --think as first argument, then sizes, else 50 and 100; twelve seeds."""
    choose_signs(*three_a_row(10, 1), {})  # loads scipy
    think = sys.argv[1] if len(sys.argv) > 1 else "normal"
    for count in [int(a) for a in sys.argv[2:]] or [50, 100]:
        for damped in (True, False):
            for seed in range(SEEDS):
                names, links = three_a_row(count, seed, damped=damped)
                begin = time.process_time()
                found = choose_signs(names, links, {}, node_limit=SIGN_NODES[think])
                seconds = time.process_time() - begin
                print(
                    f"{think:6} {count:4} states{', each damped' if damped else '':14} seed {seed:2}: {found.count:3} "
                    f"sign stages, at least {found.lower_bound:3}, ratio {found.count / found.lower_bound:.2f}, "
                    f"{seconds:6.2f} s",
                    flush=True,
                )


if __name__ == "__main__":
    main()
