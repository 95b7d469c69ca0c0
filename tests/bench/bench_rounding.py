"""Nearest values one by one against values, scale factors and speed searched together, over the reference cases.

The hand's way: every node scaled to 80 % of its limit, each integrator one capacitor that puts its resistors near the
middle of their range, each resistor the nearest value, at the planner's speed. What is left after the
best fit of all free scale factors and of the speed (minimax, in logs) is what no scaling can take away: the same
measure as the plan's coefficient errors. The planner's values are those of ``--think high``: single E24 resistors, E6
capacitors, the speed free.

``--pairs`` lets two resistors stand for one value and takes given speeds instead: a tenth, half and nine tenths of the
way through each window in logs, and real time where it lies inside.
"""

from __future__ import annotations

import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from patchplan.report.records import Plan
from patchplan.sizing.records import Sizing
from patchplan.sizing.size import size
from tests.cases.convert import FUNCTIONS_OF_STATES
from tests.plans import CASES, Plans

Array = NDArray[np.float64]


def nearest(value: float, values: tuple[float, ...]) -> float:
    """Value of the series with the least ratio to the one wanted."""
    logs = np.abs(np.log(np.array(values)) - np.log(value))
    return values[int(np.argmin(logs))]


def hand_scales(plan: Plan) -> dict[str, float]:
    """Volts per unit of every node where each uses 80 % of its limit; products follow from their factors."""
    sized, scales = plan.sizing.scales, {}
    for stage in sorted(plan.patch.stages, key=lambda s: s.kind in ("inverter", "multiplier")):
        node = stage.node
        if stage.kind == "inverter":
            scales[node] = scales.get(stage.wires[0].source, sized[node].volts_per_unit)
        elif stage.kind == "multiplier":
            first, second = (scales[w.source] for w in stage.wires)
            scales[node] = first * second / plan.target.multiplier.scale
        elif stage.kind in ("reference", "source") or stage.signal in plan.form.scales:
            scales[node] = sized[node].volts_per_unit
        else:
            scales[node] = 0.8 * sized[node].limit_volts / plan.ranges.nodes[node].peak
    return scales


def gains(plan: Plan) -> tuple[Array, Array]:
    """Log of the gain that each wire realises with nearest values over the gain it wants, and the rows of A.

    Returns
    -------
    tuple of ndarray
        ``(n_wires,)`` errors and ``(n_wires, n_nodes + 1)``: how each moves with the log of every node's scale
        (the reference's and what terminals dictate left at 0) and of the speed.
    """
    nodes = [s.node for s in plan.patch.stages]
    held = {s.node for s in plan.patch.stages if s.kind == "reference" or s.signal in plan.form.scales}
    scales, target = hand_scales(plan), plan.target
    middle = float(np.sqrt(target.resistors[0] * target.resistors[-1]))
    errors, rows = [], []
    for stage in plan.patch.stages:
        if stage.kind not in ("integrator", "summer", "inverter"):
            continue
        dial = abs(float(plan.patch.knobs[stage.knob].value)) if stage.knob else 1.0
        rate = dial / (plan.sizing.time_scale if stage.kind == "integrator" else 1.0)
        wanted = (
            np.array([abs(float(w.coefficient)) * scales[stage.node] / scales[w.source] for w in stage.wires]) * rate
        )
        lead = 1 / nearest(1 / (middle * float(np.exp(np.log(wanted).mean()))), target.capacitors)
        if stage.kind != "integrator":
            lead = nearest(20e3, target.resistors)
        for wire, gain in zip(stage.wires, wanted, strict=True):
            row = np.zeros(len(nodes) + 1)
            row[nodes.index(stage.node)] += 1
            row[nodes.index(wire.source)] -= 1
            row[-1] = stage.kind == "integrator"
            row[[nodes.index(n) for n in held]] = 0
            errors.append(np.log(lead / nearest(lead / gain, target.resistors) / gain))
            rows.append(row)
    return np.array(errors), np.array(rows)


def best_fit(plan: Plan, errors: Array, rows: Array) -> float:
    """Largest relative error that is left after the best choice of scales and speed."""
    nodes = [s.node for s in plan.patch.stages]
    products = np.zeros((0, len(nodes) + 2))
    for stage in plan.patch.stages:
        if stage.kind == "multiplier":
            row = np.zeros((1, len(nodes) + 2))
            row[0, nodes.index(stage.node)] += 1
            for wire in stage.wires:
                row[0, nodes.index(wire.source)] -= 1
            products = np.vstack([products, row])
    for stage in plan.patch.stages:
        if stage.kind == "reference" or stage.signal in plan.form.scales:
            products[:, nodes.index(stage.node)] = 0
    ones = np.ones((len(errors), 1))
    above = np.vstack([np.hstack([-rows, -ones]), np.hstack([rows, -ones])])
    found = linprog(
        np.append(np.zeros(len(nodes) + 1), 1.0),
        A_ub=above,
        b_ub=np.concatenate([-errors, errors]),
        A_eq=products if len(products) else None,
        b_eq=np.zeros(len(products)) if len(products) else None,
        bounds=[(-0.5, 0.5)] * (len(nodes) + 1) + [(0, None)],
    )
    return float(found.fun)


def searched(plan: Plan, *, pairs: bool, speed: str | float) -> tuple[Sizing, float]:
    """The plan's problem sized anew at ``--think high``, and the seconds it takes."""
    target = replace(plan.target, pairs=pairs)
    run, begin = plan.problem.build.run, time.process_time()
    sized = size(plan.form, plan.patch, plan.ranges, plan.sensitivity, target, speed=speed, run=run, think="high")
    return sized, time.process_time() - begin


def worst_loop(sized: Sizing) -> float:
    """Largest error of a loop [%]."""
    return 100.0 * max(map(abs, sized.loop_errors), default=0.0)


def compare_free(plans: Plans, names: list[str]) -> None:
    """One line a case: nearest values, those after the best fit, the planner's; medians up to 12 wires at the end."""
    heads = ("wires", "nearest", "after fit", "planned", "ratio", "loop", "seconds")
    print(f"{'worst errors, percent':38}" + "".join(f"{h:>10}" for h in heads))
    table = []
    for name in names:
        plan = plans.of(name)
        errors, rows = gains(plan)
        sized, seconds = searched(plan, pairs=False, speed="free")
        ours = max((abs(c.error_percent) for c in sized.coefficients), default=0.0)
        near = 100 * float(np.abs(errors).max())
        row = (len(errors), near, 100 * best_fit(plan, errors, rows), ours, near / ours, worst_loop(sized), seconds)
        table.append(row)
        print(f"{name:38}{row[0]:10}" + "".join(f"{v:10.3f}" for v in row[1:]), flush=True)
    small = np.array([row for row in table if row[0] <= 12])
    for label, figures in (("median", np.median(small, axis=0)), ("largest", small.max(axis=0))):
        print(f"{label + ' up to 12 wires':38}{figures[0]:10.0f}" + "".join(f"{v:10.3f}" for v in figures[1:]))


def compare_pairs(plans: Plans, names: list[str]) -> None:
    """One line a case and speed: pairs, legs, worst loop; the largest at the end."""
    heads = ("speed", "pairs", "legs", "loop", "seconds")
    print(f"{'worst loop error, percent':38}" + "".join(f"{h:>10}" for h in heads))
    worst = 0.0
    for name in names:
        plan = plans.of(name)
        (low, high), unit = plan.sizing.window, float(plan.system.time_unit_seconds)
        speeds = [unit / (low * (high / low) ** share) for share in (0.1, 0.5, 0.9)]
        for speed in [*speeds, 1.0][: 4 if low <= unit <= high else 3]:
            sized, seconds = searched(plan, pairs=True, speed=speed)
            legs = [leg for stage in sized.stages.values() for leg in stage.legs]
            worst = max(worst, worst_loop(sized))
            counted = f"{speed:10.4g}{sum(map(bool, (leg.join for leg in legs))):10}{len(legs):10}"
            print(f"{name:38}{counted}{worst_loop(sized):10.3f}{seconds:10.3f}", flush=True)
    print(f"{'largest':38}{worst:40.3f}")


def main() -> None:
    """Compare the cases named, or all."""
    named = [name for name in sys.argv[1:] if name != "--pairs"]
    names = named or [name for name in CASES if name not in FUNCTIONS_OF_STATES]
    with tempfile.TemporaryDirectory() as folder:
        (compare_pairs if "--pairs" in sys.argv else compare_free)(Plans(Path(folder)), names)


if __name__ == "__main__":
    main()
