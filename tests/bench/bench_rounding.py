"""Nearest values one by one against values, scale factors and speed searched together, over the reference cases.

The hand's way: every node scaled to 80 % of its limit, each integrator one capacitor that puts its resistors near the
middle of their range, each resistor the nearest value, at the planner's speed. What is left after the
best fit of all free scale factors and of the speed (minimax, in logs) is what no scaling can take away: the same
measure as the plan's coefficient errors.
"""

from __future__ import annotations

import sys
import tempfile
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from patchplan.report.records import Plan
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


def main() -> None:
    """Print one line a case and the medians."""
    wanted = sys.argv[1:] or [name for name in CASES if name not in FUNCTIONS_OF_STATES]
    print(f"{'worst coefficient error, percent':42}{'nearest':>9}{'after fit':>11}{'planned':>9}")
    table = []
    with tempfile.TemporaryDirectory() as folder:
        plans = Plans(Path(folder))
        for name in wanted:
            plan = plans.of(name)
            errors, rows = gains(plan)
            ours = max((abs(c.error_percent) for c in plan.sizing.coefficients), default=0.0)
            table.append((100 * float(np.abs(errors).max()), 100 * best_fit(plan, errors, rows), ours))
            print(f"{name:42}{table[-1][0]:9.3f}{table[-1][1]:11.3f}{table[-1][2]:9.3f}")
    print(f"{'median':42}" + "".join(f"{v:{w}.3f}" for v, w in zip(np.median(table, axis=0), (9, 11, 9), strict=True)))


if __name__ == "__main__":
    main()
