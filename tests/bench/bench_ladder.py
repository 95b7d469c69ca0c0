"""Planning time of linear ladders against their number of states: t ~ n^p, p fitted; and what the check says."""

from __future__ import annotations

import resource
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
from patchplan.pipeline import Choices, plan_with
from patchplan.ranges import find_ranges
from patchplan.reach.reference import find_reach
from patchplan.sensitivity import find_sensitivity
from patchplan.sizing.size import size
from tests.bench.ladder import LADDERS

#: Counted calls of each size.
RUNS = 2


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


def seconds(path: Path, *, runs: int) -> float:
    """Least processor time of planning a ladder [s]; a first call, not counted, warms all imports.

    Processor time, as another program on the machine must not change what is found.
    """
    to_circuit(path)
    times = []
    for _ in range(runs):
        begin = time.process_time()
        to_circuit(path)
        times.append(time.process_time() - begin)
    return min(times)


def checked(path: Path) -> str:
    """What the check says of a ladder, and the processor time that it takes."""
    begin = time.process_time()
    found = plan_with(read_problem(path), Choices())
    whole = time.process_time() - begin
    begin = time.process_time()
    to_circuit(path)
    check = whole - (time.process_time() - begin)
    verdict = found.verdict
    return (
        f"{verdict.verdict}, error {verdict.max_error_percent:.2g} %, spread {verdict.spread_percent:.3g} %, "
        f"check {check:.1f} s, {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1000:.0f} MB at most"
    )


def main() -> None:
    """Print the times and the exponent of each ladder; the numbers of states may follow."""
    wanted = [a for a in sys.argv[1:] if not a.isdigit()] or list(LADDERS)
    sizes = [int(a) for a in sys.argv[1:] if a.isdigit()] or [50, 200, 500]
    with tempfile.TemporaryDirectory() as folder:
        for kind in wanted:
            times = []
            for n in sizes:
                path = Path(folder) / f"ladder_{n}.toml"
                path.write_text(LADDERS[kind](n), encoding="utf-8")
                times.append(seconds(path, runs=RUNS))
                print(f"{kind}, {n} states: {times[-1]:.2f} s", flush=True)
            print(f"  {checked(path)}")
            if len(sizes) > 1:
                print(f"  exponent {np.polyfit(np.log(sizes), np.log(times), 1)[0]:.2f} (at most 1.3)", flush=True)


if __name__ == "__main__":
    main()
