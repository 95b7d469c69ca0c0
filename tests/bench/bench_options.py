"""Thirty builds compared against ten straight runs, in one process, in turn.

Usage: bench_options.py [names of equations/*.toml]. Prints seconds of both sides, best of two, and their ratio.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable

from patchplan.builds import options
from patchplan.equation.problem import Problem
from patchplan.equation.reader import read_problem
from patchplan.pipeline import Choices, plan_with
from tests.plans import EQUATIONS

NAMES = (
    "oscillator", "seat_suspension", "van_der_pol", "oven", "pickup_filter", "motor_speed_loop", "thermal_chain",
    "lorenz",
)  # fmt: skip
RUNS, BUILDS = 10, 30


def seconds(work: Callable[[Problem], object], problem: Problem, times: int = 1) -> float:
    begin = time.perf_counter()
    for _ in range(times):
        work(problem)
    return time.perf_counter() - begin


def planned(problem: Problem) -> object:
    return plan_with(problem, Choices())


def main() -> None:
    worst = 0.0
    for name in sys.argv[1:] or NAMES:
        problem = read_problem(EQUATIONS / f"{name}.toml")
        count = len(options(problem).options)
        pairs = [(seconds(options, problem), seconds(planned, problem, RUNS)) for _ in range(2)]
        many, ten = (min(side) for side in zip(*pairs, strict=True))
        many *= BUILDS / count
        worst = max(worst, many / ten)
        print(
            f"{name:20s} {BUILDS} builds {many:6.2f} s, {RUNS} plans {ten:6.2f} s, ratio {many / ten:.2f}", flush=True
        )
    print(f"worst ratio {worst:.2f}, target 1")


if __name__ == "__main__":
    main()
