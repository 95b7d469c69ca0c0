"""Limits of all nodes against 2,000 random settings of the parameters: every reference case with boxes of 10 %.

Each polynomial case is planned twice: with every parameter as a knob (``from``, ``to``), and with the same boxes as
tolerances. All settings are integrated as one array by the classical method of Runge and Kutta with a step that
is halved until the runs agree to 1e-4 of each state's peak; the patch is evaluated on them.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction

import numpy as np

from patchplan.equation.explicit import build_system
from patchplan.equation.problem import Parameter, Problem
from patchplan.equation.reader import read_problem
from patchplan.equation.system import System
from patchplan.errors import PatchplanError
from patchplan.patch.records import Patch
from patchplan.patch.sums import wire_gains
from patchplan.pipeline import plan
from patchplan.reach.field import field_of
from patchplan.reach.inputs import Inputs
from patchplan.reach.points import knobs_at
from tests.cases.convert import FUNCTIONS_OF_STATES, problem_text, read_cases

SETTINGS, WIDTH, SEED = 2000, Fraction(1, 10), 7
#: Steps of the first pass, most steps, and how far two passes may differ [share of each state's peak].
FIRST, MOST, AGREE = 400, 51_200, 1e-4
#: Settings integrated at a time, and instants kept.
ROWS = 200


def boxed(problem: Problem, *, knobs: bool) -> Problem:
    """The problem with every nonzero parameter in a box of +-10 %, those left out that no knob can serve."""
    kept = dict(problem.parameters)
    for name, p in problem.parameters.items():
        ends = sorted((p.value * (1 - WIDTH), p.value * (1 + WIDTH)))
        if not p.value:
            continue
        made = replace(p, low=ends[0], high=ends[1]) if knobs else replace(p, tolerance=float(WIDTH))
        trial = replace(problem, parameters={**kept, name: made})
        try:
            build_system(trial)
        except PatchplanError:
            continue
        kept[name] = made
    return replace(problem, parameters=kept)


def moved(parameters: dict[str, Parameter]) -> list[Parameter]:
    return [p for p in parameters.values() if p.adjustable or p.tolerance]


def states_over(system: System, weights: np.ndarray, steps: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Times, states ``(n, m, n_times)`` and sources of all runs; runs that leave the floats become nan."""
    field = field_of(system)
    bound = field.bind(weights)
    inputs = Inputs(system)
    x = np.repeat(np.array([[float(s.start)] for s in system.states]), weights.shape[1], axis=1)
    kept_times, kept, fed = [], [], []
    depth = inputs.edge_depth
    with np.errstate(all="ignore"):
        for begin, stop in zip(inputs.edges[:-1], inputs.edges[1:], strict=True):
            count = max(8, int(np.ceil(steps * (stop - begin) / inputs.duration)))
            every = max(1, count // ROWS)
            h = (stop - begin) / count

            def source(t: float, low: float = begin + depth, high: float = stop - depth) -> np.ndarray | None:
                return inputs.at(min(max(t, low), high))[:, None] * np.ones(weights.shape[1]) if inputs.count else None

            for i in range(count + 1):
                t = begin + i * h
                if i % every == 0 or i == count:
                    kept_times.append(t)
                    kept.append(x)
                    fed.append(source(t))
                if i == count:
                    break
                u0, u1, u2 = source(t), source(t + h / 2), source(t + h)
                k1 = bound.rates(x, u0)
                k2 = bound.rates(x + h / 2 * k1, u1)
                k3 = bound.rates(x + h / 2 * k2, u1)
                k4 = bound.rates(x + h * k3, u2)
                x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
    sources = np.stack(fed, axis=2) if inputs.count else np.zeros((0, weights.shape[1], len(kept)))
    return np.array(kept_times), np.stack(kept, axis=2), sources


def agreed(system: System, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray, float, int]:
    """States, sources, how far the last two passes differ, and the steps of the last."""
    steps, before = FIRST, None
    while True:
        _, states, sources = states_over(system, weights, steps)
        ends = np.stack((states.min(axis=2), states.max(axis=2)))
        if before is not None:
            peak = np.abs(ends).max(axis=(0, 2), keepdims=True)[..., 0]
            off = float(np.nanmax(np.abs(ends - before).max(axis=0) / np.where(peak > 0, peak, 1.0).reshape(-1, 1)))
            if (np.isfinite(ends).all() and off < AGREE) or steps >= MOST:
                return states, sources, off, steps
        before, steps = ends, steps * 2


def node_values(
    patch: Patch, names: list[str], values: np.ndarray, knobs: dict[str, np.ndarray], offsets: dict[str, float]
) -> Iterator[tuple[str, float, float, int]]:
    """Lowest and highest value of every node over all settings, and the setting furthest out."""
    table: dict[str, np.ndarray] = {}
    for stage in patch.stages:
        if stage.kind in ("integrator", "source"):
            table[stage.node] = values[names.index(stage.signal)] - offsets.get(stage.signal, 0.0)
    for stage in patch.stages:
        if stage.kind == "reference":
            table[stage.node] = np.ones((1, 1))
        elif stage.kind == "multiplier":
            table[stage.node] = table[stage.wires[0].source] * table[stage.wires[1].source]
        elif stage.kind == "inverter":
            table[stage.node] = table[stage.wires[0].source]
        elif stage.kind == "summer":
            gains = wire_gains(stage, patch, {**knobs, stage.knob: 1.0} if stage.knob else knobs)
            total = sum(g * table[w.source] for g, w in zip(gains, stage.wires, strict=False))
            factor = np.asarray(knobs[stage.knob])[:, None] if stage.knob else 1.0
            table[stage.node] = np.asarray(total * factor)
        here = table[stage.node]
        peaks = np.abs(here).max(axis=1)
        yield stage.node, float(here.min()), float(here.max()), int(peaks.argmax())


def measure(name: str, text: str, *, knobs: bool) -> str:
    """One line: settings, nodes beyond their limit and by how much, use of the limits, agreement of the passes."""
    problem = boxed(read_problem(text), knobs=knobs)
    names = [p.name for p in moved(dict(problem.parameters))]
    if not names:
        return "no parameter fits a box"
    begin = time.process_time()
    found = plan(problem)
    planned = time.process_time() - begin
    as_knobs = boxed(read_problem(text), knobs=True)
    as_knobs = replace(as_knobs, parameters={n: p if n in names else problem.parameters[n]
                                             for n, p in as_knobs.parameters.items()})  # fmt: skip
    wide = build_system(as_knobs)
    points = np.random.default_rng(SEED).uniform(0, 1, (SETTINGS, len(wide.adjustable)))
    field = field_of(wide)
    states, sources, off, steps = agreed(wide, field.weights(knobs_at(wide, points)))
    here = knobs_at(found.system, points) if knobs and found.system.adjustable else {}
    alive = np.isfinite(states).all(axis=(0, 2))
    values = np.concatenate((states, sources))[:, alive]
    settings = {k: v[alive] for k, v in here.items()}
    offsets = {n: float(v) for n, v in found.form.offsets.items()}
    given = [s.name for s in wide.states] + [s.name for s in wide.sources]
    over, uses, worst = 0, [], 0.0
    for node, low, high, _ in node_values(found.patch, given, values, settings, offsets):
        planned_range = found.ranges.nodes[node]
        scale = found.sizing.scales[node]
        uses.append(max(abs(low), abs(high)) * scale.volts_per_unit / scale.limit_volts)
        peak = planned_range.peak or 1.0
        beyond = max(max(abs(low), abs(high)) / peak - 1, 0.0)
        worst = max(worst, beyond)
        over += uses[-1] > 1 + 1e-6
    return (
        f"{len(names)} parameters, {alive.sum()} settings, {steps} steps (agree {off:.0e}), {found.verdict.verdict}, "
        f"plan {planned:.1f} s; nodes {len(uses)}, over their limit {over}, beyond their range by {100 * worst:.2g} %, "
        f"largest use {100 * max(uses):.0f} %, median {100 * float(np.median(uses)):.0f} %"
    )


def main(wanted: list[str]) -> None:
    for name, case in read_cases().items():
        if name in FUNCTIONS_OF_STATES or (wanted and not any(w in name for w in wanted)):
            continue
        for knobs in (True, False):
            try:
                line = measure(name, problem_text(case), knobs=knobs)
            except PatchplanError as error:
                line = f"refused: {str(error).splitlines()[0]}"
            print(f"{name:34s} {'knobs' if knobs else 'tolerance':9s} {line}", flush=True)


if __name__ == "__main__":
    main(sys.argv[1:])
