"""A long property run: random problems from text to circuit.cir, held against other solvers.

For each seed: the plan, its patch read back, the Reference against a second solver (`truth.py`), circuit.cir in ngspice
against the tool's own simulation, the Reference and the nodes' limits, plan.json against its schema, the same plan
twice. Prints one line a problem; the text of each problem with a failure stays in the folder.

    python tests/bench/bench_random.py FIRST COUNT FOLDER
"""

from __future__ import annotations

import json
import subprocess
import sys
import time
import traceback
from collections import Counter
from pathlib import Path

import jsonschema
import numpy as np
from numpy.typing import NDArray

import patchplan.report
from patchplan.check.figures import error_base, settled
from patchplan.equation.problem import Problem
from patchplan.equation.reader import read_problem
from patchplan.errors import PatchplanError
from patchplan.patch.read_back import read_back
from patchplan.pipeline import plan as make_plan
from patchplan.report.board import board_of
from patchplan.report.plan_json import plan_data, plan_text
from patchplan.report.records import Plan
from tests.bench.drawn import Drawn, add_terminals, text_of
from tests.bench.random_problems import draw
from tests.bench.truth import Truth
from tests.circuit.spice import run_ngspice
from tests.test_spice_agreement import jumps_settled

Array = NDArray[np.float64]

SCHEMA = json.loads(Path(patchplan.report.__file__).with_name("plan.schema.json").read_text(encoding="utf-8"))
#: Seconds that ngspice may take for one board.
PATIENCE = 90.0
#: Below this a signal is what bias currents make of zero, and its error is no share of it [V].
LEAST = 1e-3
#: Every so many seeds the plan is made twice.
TWICE = 4


def problem_of(seed: int, folder: Path) -> tuple[Drawn, Truth, Path]:
    """The problem of a seed written to a folder; draws again where the solution is not bounded."""
    for attempt in range(20):
        drawn = draw(seed + 1_000_003 * attempt)
        try:
            truth = Truth(drawn)
        except ArithmeticError:
            continue
        break
    else:
        raise RuntimeError(f"seed {seed}: no bounded solution in twenty draws")
    found = truth.at(np.linspace(0, drawn.duration, 400))
    watched = [w.lstrip("+-") for w in drawn.watch] or list(drawn.orders)
    add_terminals(seed, drawn, {m: float(np.abs(found[m]).max()) for m in watched})
    place = folder / f"{seed}"
    place.mkdir(parents=True, exist_ok=True)
    for name, given in drawn.inputs.items():
        if not isinstance(given, str):
            rows = "".join(f"{t!r},{v!r}\n" for t, v in zip(*(g.tolist() for g in given), strict=True))
            (place / f"{name}.csv").write_text(f"t,v\n{rows}", encoding="utf-8")
    path = place / "problem.toml"
    path.write_text(text_of(drawn), encoding="utf-8")
    return drawn, truth, path


def check_patch(plan: Plan) -> list[str]:
    """The patch computes the Form."""
    system = plan.form.system
    rows = read_back(plan.patch, {r.name for r in system.signals})
    wrong = [r.name for r in (*system.rows, *system.signals) if rows.get(r.name) != r]
    return [f"read_back: {', '.join(wrong)}"] if wrong else []


def check_reference(plan: Plan, truth: Truth) -> list[str]:
    """The Reference is the second solver's solution."""
    reference, failures = plan.reach.reference, []
    table = truth.at(reference.times)
    for name in set(reference.names) & set(table):
        wanted = table[name]
        error = np.abs(reference.of(name) - wanted)
        peak = float(np.abs(wanted).max()) or 1.0
        if error.max() > 1e-6 * peak:
            row = int(error.argmax())
            failures.append(f"reference {name}: {error.max() / peak:.2e} of peak at t = {reference.times[row]:.9g}")
    return failures


def error_against(times: Array, wanted: Array, spice_times: Array, found: Array, counts: Array) -> float:
    """Largest difference on the simulator's own time points that lie between rows that count; 0 where none does."""
    inside = np.interp(spice_times, times, counts.astype(float)) == 1.0
    return float(np.abs(found - np.interp(spice_times, times, wanted))[inside].max(initial=0.0))


def check_spice(plan: Plan, netlist: str) -> list[str]:
    """ngspice agrees with the check, the Reference and the limits."""
    circuit, verdict, reference, failures = plan.circuit, plan.verdict, plan.reach.reference, []
    assert circuit is not None
    try:
        volts, seconds = run_ngspice(netlist, seconds=PATIENCE)
    except subprocess.TimeoutExpired:
        return [f"ngspice: slow, over {PATIENCE:g} s"]
    except AssertionError as error:
        return [f"ngspice: {str(error)[-300:]}"]
    if abs(seconds[-1] / circuit.duration - 1) > 1e-6:
        return [f"ngspice: stopped at {seconds[-1] / circuit.duration:.3g} of the run"]
    horizon = np.inf if verdict.horizon is None else verdict.horizon
    wait = 1e-3 * circuit.duration / circuit.time_scale
    for net, own in verdict.volts.items():
        node = circuit.nodes[net]
        known = node.signal in reference.names
        counts = (
            settled(reference, node.signal, float(np.ptp(own)), wait) if known else jumps_settled(own, verdict.times)
        )
        counts &= verdict.times / circuit.time_scale <= horizon
        error = (
            100 * error_against(verdict.times, own, seconds, volts[net], counts) / max(LEAST, float(np.abs(own).max()))
        )
        if error > 0.5:
            failures.append(f"spice against check {net}: {error:.3g} %")
    for signal, net in circuit.watched.items():
        node, base = circuit.nodes[net], error_base(circuit, reference, signal)
        found = (volts[net] - node.offset_volts) / (node.sign * node.volts_per_unit)
        counts = settled(reference, signal, base, wait) & (reference.times <= horizon)
        error = error_against(reference.times, reference.of(signal), seconds / circuit.time_scale, found, counts)
        stated = next(s.max_error_percent for s in verdict.signals if s.name == signal)
        if 100 * error / base > stated + 0.5:
            failures.append(f"spice against reference {signal}: {100 * error / base:.3g} %, stated {stated:.3g} %")
    for row in verdict.nodes if verdict.verdict == "follows" else ():
        peak = float(np.abs(volts[row.node]).max())
        if peak > 1.005 * row.limit_volts:
            failures.append(
                f"spice limit {row.node}: {peak:.4g} V of {row.limit_volts:.4g} V, check {row.peak_volts:.4g} V"
            )
    return failures


def check_again(problem: Problem, netlist: str) -> list[str]:
    """The same problem gives the same bytes."""
    return [] if board_of(make_plan(problem))[1] == netlist else ["second plan: another circuit"]


def examine(seed: int, folder: Path) -> tuple[str, list[str], str]:
    """Outcome, failures and a remark for one seed."""
    drawn, truth, path = problem_of(seed, folder)
    try:
        problem = read_problem(path)
        plan = make_plan(problem)
    except PatchplanError as error:
        return "refused", [], f"{drawn.kind}: {error}"
    except Exception:
        return "exception", [traceback.format_exc()], drawn.kind
    failures = check_patch(plan) + check_reference(plan, truth)
    verdict, remark = plan.verdict, f"{drawn.kind}, {drawn.build.get('run')}, {drawn.build.get('speed', 'free')}"
    try:
        jsonschema.validate(json.loads(plan_text(plan_data(plan, ["plan.json"]))), SCHEMA)
        if plan.circuit is None:
            return verdict.verdict, failures, f"{remark}: {' '.join(plan.sizing.faults)}"
        netlist = board_of(plan)[1]
        if verdict.verdict in ("follows", "inaccurate"):
            failures += check_spice(plan, netlist)
        if seed % TWICE == 0:
            failures += check_again(problem, netlist)
    except Exception:
        failures.append(traceback.format_exc())
    remark += f": {verdict.max_error_percent:.3g} %, spread {verdict.spread_percent:.3g} %"
    if verdict.verdict == "overload":
        remark += " " + "; ".join(n.cause for n in verdict.nodes if not n.ok)
    return verdict.verdict, failures, remark


def main() -> None:
    """Run the seeds and print counts."""
    first, count, folder = int(sys.argv[1]), int(sys.argv[2]), Path(sys.argv[3])
    outcomes: Counter[str] = Counter()
    failed = 0
    for seed in range(first, first + count):
        began = time.perf_counter()
        outcome, failures, remark = examine(seed, folder)
        outcomes[outcome] += 1
        failed += bool(failures)
        print(f"{seed} {outcome} {time.perf_counter() - began:.1f} s {remark}", flush=True)
        for failure in failures:
            print(f"    FAILED {failure}", flush=True)
    print(f"{dict(sorted(outcomes.items()))}, {failed} with failures")


if __name__ == "__main__":
    main()
