"""Values for large boards: coordinate descent on scale factors and speed towards purchasable ratios.

Each row wants a log of a resistor that lies on a fixed grid once the stage's capacitor or feedback is chosen. The cost
is the weighted squared distance to that grid; moving one unknown touches only the rows of one stage and its consumers,
so that a sweep grows with the number of wires and no dense matrix is made.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.crowd import nearest_place
from patchplan.sizing.loops import Circuits
from patchplan.sizing.losses import residual_of
from patchplan.sizing.model import Model
from patchplan.sizing.pairs import legs_with_pairs
from patchplan.sizing.records import Target
from patchplan.sizing.values import Values, pick_stage_values, resistor, start_ratios, wanted_products

Array = NDArray[np.float64]
SWEEPS = 3
#: How many exact hits on either side of each row's place are tried in one move.
REACH = 3
#: A row that is off by no more than this, in logs, gets no pair of resistors.
UNPAIRED = 1e-3
#: Most logs compared with the grid in one move: an unknown of many rows, as the speed, tries a part of their hits.
MOST_COMPARED = 200_000
#: Speeds that the search begins from: at most this many, and about this many rows settled in all.
MOST_SPEEDS, WORK = 24, 2400


@dataclass(frozen=True)
class _Rows:
    """Rows in array form: x = constant + A theta is the log that has to lie on ``grid``."""

    constant: Array
    weights: Array
    on_start: NDArray[np.bool_]
    touching: list[tuple[NDArray[np.intp], Array]]
    grid: Array
    start_grid: Array

    def distance(self, x: Array, rows: NDArray[np.intp]) -> Array:
        """Distance of logs x, shape ``(..., len(rows))``, to the nearest purchasable one."""
        away = _distance(self.grid, x)
        starts = self.on_start[rows]
        if starts.any():
            away[..., starts] = _distance(self.start_grid, x[..., starts])
        return away


def choose_large(model: Model, target: Target, circuits: Circuits, *, comfortable: Mapping[str, float]) -> Values:
    """Values, scale factors and speed of a board with many wires; as ``choose_values``, from several speeds."""
    best: Values | None = None
    for start in _starts(model):
        picked = pick_stage_values(model, target, wanted_products(model, start), comfortable, lambda: 0)
        rows = _rows(model, target, picked)
        theta, x = _settle(rows, model, start)
        found = _name_parts(model, target, theta, x, picked, rows.weights)
        if best is None or found.worst < best.worst:
            best = found
    assert best is not None
    residual = residual_of(model, target, best.parts, best.joins)
    left = residual - np.array([model.at(r.want, best.theta) - r.want.constant for r in model.ratios])
    return replace(best, errors=np.expm1(-left), loop_errors=circuits.errors(residual))


def _starts(model: Model) -> Iterator[Array]:
    """The middle of all bounds, then other speeds; fewer of them for larger boards, one where the speed is given."""
    yield model.centre
    for column in model.speed.slope:
        for share in np.linspace(0.05, 0.95, min(MOST_SPEEDS, WORK // max(len(model.ratios), 1))):
            start = model.centre
            start[column] = model.low[column] + share * (model.high[column] - model.low[column])
            yield start


def settled_start(model: Model, target: Target, theta: Array, picked: Mapping[tuple[str, int | str], float]) -> Array:
    """Theta near a given one at which many rows hit purchasable values, shape ``(n_theta,)``."""
    return _settle(_rows(model, target, picked), model, theta)[0]


def _settle(rows: _Rows, model: Model, start: Array) -> tuple[Array, Array]:
    """Theta after :data:`SWEEPS` sweeps from ``start``, and the logs x of all rows there."""
    theta, x = start.copy(), rows.constant.copy()
    for column, (touched, slopes) in enumerate(rows.touching):
        x[touched] += slopes * theta[column]
    # The speed touches most rows and comes last in theta: it moves first, scale factors settle around it.
    for _ in range(SWEEPS):
        for column in reversed(range(len(theta))):
            _move(rows, model, theta, x, column)
    return theta, x


def _rows(model: Model, target: Target, picked: Mapping[tuple[str, int | str], float]) -> _Rows:
    constant, slow = np.zeros(len(model.ratios)), _slow_down(model, target, picked)
    touching: list[tuple[list[int], list[float]]] = [([], []) for _ in model.low]
    for row, ratio in enumerate(model.ratios):
        constant[row] = ratio.want.constant
        if ratio.kind == "integrator":
            constant[row] -= log(picked[ratio.stage, "C"]) + slow.get(ratio.stage, 0.0)
        elif ratio.kind == "summer":
            constant[row] += log(picked.get((ratio.stage, "Rf"), 1.0))
        for column, slope in ratio.want.slope.items():
            touching[column][0].append(row)
            touching[column][1].append(slope)
    return _Rows(
        constant,
        np.array([r.weight for r in model.ratios]),
        np.array([r.kind == "start" for r in model.ratios], dtype=bool),
        [(np.array(r, dtype=np.intp), np.array(s)) for r, s in touching],
        np.log(np.array(target.resistors)),
        start_ratios(target.resistors).logs,
    )


def _slow_down(model: Model, target: Target, picked: Mapping[tuple[str, int | str], float]) -> dict[str, float]:
    """log of what the operate switch and finite bandwidth add to each stage's R*C, at the wanted values."""
    extra: dict[str, float] = {}
    for ratio, product in zip(model.ratios, wanted_products(model, model.centre), strict=True):
        if ratio.kind == "integrator":
            farad = picked[ratio.stage, "C"]
            # What the summing node sees of a network of three is little more than its last, largest resistor.
            conductance = max(farad / float(product), 1.0 / target.resistors[-1])
            slow = conductance * (target.switch_on + 1.0 / (farad * target.op_amp.gain_bandwidth))
            extra[ratio.stage] = extra.get(ratio.stage, 0.0) + slow
    return {stage: float(np.log1p(value)) for stage, value in extra.items()}


def _distance(grid: Array, x: Array) -> Array:
    above = np.clip(np.searchsorted(grid, x), 1, len(grid) - 1)
    away: Array = np.minimum(np.abs(grid[above] - x), np.abs(x - grid[above - 1]))
    return away


def _move(rows: _Rows, model: Model, theta: Array, x: Array, column: int) -> None:
    """Move one unknown, in place, to the exact hit of one of its rows that costs least over all of them."""
    touched, slopes = rows.touching[column]
    if touched.size == 0:
        return
    place = np.searchsorted(rows.grid, x[touched])
    near = np.clip(place[:, None] + np.arange(-REACH, REACH)[None, :], 0, len(rows.grid) - 1)
    steps = ((rows.grid[near] - x[touched][:, None]) / slopes[:, None]).ravel()
    steps = np.unique(np.round(np.concatenate([[0.0], steps]), 12))
    fits = (theta[column] + steps >= model.low[column]) & (theta[column] + steps <= model.high[column])
    steps = steps[fits | (steps == 0.0)]
    steps = np.append(steps[:: max(1, steps.size * touched.size // MOST_COMPARED)], 0.0)
    moved = x[touched][None, :] + steps[:, None] * slopes[None, :]
    cost = ((rows.weights[touched] * rows.distance(moved, touched)) ** 2).sum(axis=1)
    step = steps[int(np.argmin(cost + 1e-15 * np.abs(steps)))]
    theta[column] += step
    x[touched] += slopes * step


def _name_parts(
    model: Model,
    target: Target,
    theta: Array,
    x: Array,
    picked: Mapping[tuple[str, int | str], float],
    weights: Array,
) -> Values:
    parts: dict[tuple[str, int | str], tuple[float, ...]] = {key: (value,) for key, value in picked.items()}
    joins: dict[tuple[str, int | str], str] = {}
    left = np.zeros(len(x))
    for row, (ratio, wanted) in enumerate(zip(model.ratios, x, strict=True)):
        choice = start_ratios(target.resistors) if ratio.kind == "start" else resistor(float(np.exp(wanted)), target)
        position = int(nearest_place(choice.logs, wanted))
        if target.pairs and ratio.kind != "start" and abs(choice.logs[position] - wanted) > UNPAIRED:
            choice = legs_with_pairs(target.resistors, wanted > choice.logs[-1])
            position = int(nearest_place(choice.logs, wanted))
            joins[ratio.stage, ratio.wire] = choice.join(position)
        parts[ratio.stage, ratio.wire] = choice.parts[position]
        left[row] = choice.logs[position] - wanted
    worst = float(np.max(weights * np.abs(left), initial=0.0))
    return Values(parts, theta, worst, left, np.expm1(-left), joins={k: v for k, v in joins.items() if v})
