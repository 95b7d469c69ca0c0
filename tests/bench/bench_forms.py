"""How far boards of each form of a low-pass differ: companion, cascade and the others, before values are chosen."""

from __future__ import annotations

import sys
from time import perf_counter

import numpy as np
from scipy import signal

from patchplan.equation.explicit import system_of
from patchplan.equation.problem import Problem
from patchplan.equation.reader import read_problem
from patchplan.equation.system import System
from patchplan.shortlist import consider

#: Name, poles and zeros, and the tone as a share of the corner.
FILTERS = {
    "Butterworth 6": (signal.butter(6, 1, analog=True), 0.85),
    "Chebyshev 0.5 dB 6": (signal.cheby1(6, 0.5, 1, analog=True), 0.9),
    "Chebyshev 0.5 dB 10": (signal.cheby1(10, 0.5, 1, analog=True), 0.9),
    "Chebyshev 0.5 dB 16": (signal.cheby1(16, 0.5, 1, analog=True), 0.9),
    "elliptic 0.5 dB 40 dB 6": (signal.ellip(6, 0.5, 40, 1, analog=True), 0.9),
}


def problem_of(numerator: np.ndarray, denominator: np.ndarray, tone: float) -> tuple[Problem, System]:
    def text(polynomial: np.ndarray) -> str:
        last = len(polynomial) - 1
        return "(" + " + ".join(f"({c})*s^{last - k}" for k, c in enumerate(polynomial.tolist())) + ")"

    equation = f"y = {text(numerator)}/{text(denominator)}*u"
    problem = read_problem(f'equations = ["{equation}"]\nduration = 60\n[inputs]\nu = "sin({tone}*t)"\n')
    return problem, system_of(problem)


def main() -> None:
    wanted = sys.argv[1:] or list(FILTERS)
    for name in wanted:
        (numerator, denominator), tone = FILTERS[name]
        problem, system = problem_of(numerator, denominator, tone)
        begin = perf_counter()
        rows = consider(problem, system)
        print(f"{name}, tone at {tone:.0%} of the corner, {perf_counter() - begin:.1f} s")
        for row in rows:
            shown = f"{row.tolerance_percent:10.3g} %" if row.tolerance_percent is not None else row.reason
            print(f"  {row.form:22}{row.stages:4} stages{row.wires:5} wires  {shown}")


if __name__ == "__main__":
    main()
