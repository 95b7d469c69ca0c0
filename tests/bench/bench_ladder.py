"""Planning time of a linear thermal ladder against its number of states: t ~ n^p, p fitted."""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from patchplan.circuit.build import build_circuit
from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.target import target_of
from patchplan.equation.explicit import build_system
from patchplan.equation.reader import read_problem
from patchplan.form.offsets import find_form
from patchplan.patch.build import build_patch
from patchplan.ranges import find_ranges
from patchplan.reach.reference import find_reach
from patchplan.sensitivity import find_sensitivity
from patchplan.sizing.size import size
from tests.bench.ladder import ladder_text


def to_circuit(path: Path) -> None:
    """Read the file and go as far as the Circuit: the pipeline's calls without the check."""
    problem = read_problem(path)
    system = build_system(problem)
    catalogue = load_catalogue(problem.own_parts)
    target = target_of(problem.build, catalogue)
    reach = find_reach(system, problem.ranges, problem.build)
    form = find_form(system, reach, problem.terminals)
    patch = build_patch(form)
    ranges = find_ranges(patch, form, reach)
    sensitivity = find_sensitivity(form, patch, ranges)
    sizing = size(form, patch, ranges, sensitivity, target, speed="free", run="once", think="normal")
    if sizing.faults:
        raise SystemExit(f"{path.stem} cannot be built: {sizing.faults[0]} ({len(sizing.faults)} faults)")
    build_circuit(form, patch, sizing, target, problem.build, catalogue)


def seconds(n: int, folder: Path, *, runs: int) -> float:
    """Best time of reading and planning a ladder of ``n`` states [s]; a first call, not counted, warms all imports."""
    path = folder / f"ladder_{n}.toml"
    path.write_text(ladder_text(n), encoding="utf-8")
    to_circuit(path)
    times = []
    for _ in range(runs):
        begin = time.perf_counter()
        to_circuit(path)
        times.append(time.perf_counter() - begin)
    return min(times)


def main() -> None:
    """Print the times and the exponent."""
    sizes = [int(a) for a in sys.argv[1:]] or [50, 200, 500]
    with tempfile.TemporaryDirectory() as folder:
        times = [seconds(n, Path(folder), runs=1) for n in sizes]
    for n, taken in zip(sizes, times, strict=True):
        print(f"{n:5} states {taken:8.2f} s")
    exponent = np.polyfit(np.log(sizes), np.log(times), 1)[0]
    print(f"exponent {exponent:.2f} (at most 1.5)")


if __name__ == "__main__":
    main()
