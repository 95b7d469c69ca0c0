"""Fewest sign stages of random systems with three entries a row: count, proved bound, gap and time."""

from __future__ import annotations

import sys
import time

from patchplan.patch.signs import choose_signs
from tests.patch.random_links import three_a_row


def main() -> None:
    """One line for each system; sizes as arguments, else 50 and 100; seeds 0 to 7."""
    choose_signs(*three_a_row(10, 1), {})  # loads scipy
    for count in [int(a) for a in sys.argv[1:]] or [50, 100]:
        for damped in (True, False):
            for seed in range(8):
                names, links = three_a_row(count, seed, damped=damped)
                begin = time.perf_counter()
                found = choose_signs(names, links, {})
                seconds = time.perf_counter() - begin
                print(
                    f"{count:4} states{', each damped' if damped else '':14} seed {seed}: {found.count:3} sign stages, "
                    f"at least {found.lower_bound:3}, ratio {found.count / found.lower_bound:.2f}, {seconds:6.2f} s",
                    flush=True,
                )


if __name__ == "__main__":
    main()
