"""One attempt at values from a starting point of scale factors and speed, and the best of several."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.large import choose_large, settled_start
from patchplan.sizing.model import Model
from patchplan.sizing.records import Target
from patchplan.sizing.search import Effect, Loops, Menu, descend, find_loops, loop_errors, merit, split_rest
from patchplan.sizing.values import (
    Choice,
    Unknowns,
    Values,
    find_unknowns,
    pick_stage_values,
    plain,
    resistor,
    start_ratios,
    wanted_products,
)

Array = NDArray[np.float64]
#: By how hard to think: most attempts (starting points, not seconds), and the predicted error that is good enough, as a
#: fraction of peak: normally a tenth of what 1 % resistors spread in a signal that follows one of them.
ATTEMPTS = {"low": (20, 2e-3), "normal": (250, 5e-4), "high": (2000, 5e-5)}
#: How far a value may lie from the wanted one at the start of an attempt, in logs: three steps of E24.
WIDTH = 0.3
#: The same for capacitors and for the feedback of summers (steps of E6 and E24), and the most values of one start ratio
#: that a menu holds.
CAPACITOR_WIDTH = 0.9
FEEDBACK_WIDTH = 0.6
MOST_NEAR = 16
#: Boards with more ratios than this take only the search that grows no faster than the board.
LARGE = 40
#: Attempts on boards with more ratios than this begin where coordinate descent has settled, and compete with it.
SETTLED = 12


@dataclass(frozen=True)
class _Board:
    """What all attempts share."""

    model: Model
    target: Target
    unknowns: Unknowns
    matrix: Array
    constant: Array
    effect: Effect
    loops: Loops
    comfortable: Mapping[str, float]


def matrix_of(model: Model) -> tuple[Array, Array]:
    """A of shape ``(n_rows, n_theta)`` and b of shape ``(n_rows,)``."""
    matrix = np.zeros((len(model.ratios), len(model.low)))
    for row, ratio in enumerate(model.ratios):
        for column, value in ratio.want.slope.items():
            matrix[row, column] += value
    return matrix, np.array([r.want.constant for r in model.ratios])


def choose_values(
    model: Model,
    target: Target,
    effect: Effect,
    *,
    comfortable: Mapping[str, float] | None = None,
    think: str = "normal",
    seed: int = 1,
) -> Values:
    """Search R, C, scale factors and speed together, from several starting points.

    Parameters
    ----------
    effect
        What residuals of the model's rows do to the watched signals.
    comfortable
        Stage -> resistance its capacitor is chosen for [ohm], where the usual one does not serve.
    think
        Key of :data:`ATTEMPTS`.
    seed
        Of the starting points; the same seed gives the same values.
    """
    if len(model.ratios) > LARGE:
        return choose_large(model, target, comfortable=comfortable or {})
    matrix, constant = matrix_of(model)
    unknowns = find_unknowns(model.ratios, model.feedback)
    board = _Board(model, target, unknowns, matrix, constant, effect, find_loops(matrix, effect), comfortable or {})
    random = np.random.default_rng(seed)
    attempts: list[tuple[float, Array, list[Choice]]] = []
    enough = ATTEMPTS[think][1]
    for number in range(_count(len(unknowns.names), think)):
        attempts.append(_attempt(board, number, random))
        if attempts[-1][0] < enough:
            break
    attempts.sort(key=lambda found: found[0])
    best = [_finish(board, y, choices) for _, y, choices in attempts[:3]]
    if len(model.ratios) > SETTLED:
        best.append(choose_large(model, target, comfortable=comfortable or {}))
    return min(best, key=lambda values: merit(effect, -np.log1p(np.maximum(values.errors, -1 + 1e-9))))


def _count(unknowns: int, think: str) -> int:
    """Fewer attempts for boards whose pairs of moves are many."""
    share: float = min(1.0, 20 / max(unknowns, 1))
    return max(3, round(ATTEMPTS[think][0] * float(share**1.5)))


def _attempt(board: _Board, number: int, random: np.random.Generator) -> tuple[float, Array, list[Choice]]:
    """Descend from one starting point: the middle first, then scattered ones."""
    model = board.model
    theta = model.centre
    if number:
        theta = theta + random.uniform(-0.35, 0.35, len(theta)) * (model.high - model.low)
    rank = (lambda: int(random.integers(0, 3))) if number else (lambda: 0)
    picked = pick_stage_values(model, board.target, wanted_products(model, theta), board.comfortable, rank)
    if len(model.ratios) > SETTLED:
        theta = settled_start(model, board.target, theta, picked)
    wanted = wanted_products(model, theta)
    choices, centre = _choices(board, wanted, picked)
    y = np.array([c.logs[np.argmin(np.abs(c.logs - w))] for c, w in zip(choices, centre, strict=True)])
    menu = _menu(board, choices, centre)
    for _ in range(2):
        y = descend(board.loops, board.unknowns.incidence, board.constant - _shift(board, y), menu, y)
    residual = board.unknowns.incidence @ y - board.constant + _shift(board, y)
    left = board.loops.errors(residual)
    outside = board.loops.outside(residual, model.low, model.high)
    return float(np.sqrt(left @ left)) + outside, y, choices


def _choices(board: _Board, wanted: Array, picked: dict[tuple[str, int | str], float]) -> tuple[list[Choice], Array]:
    """What each unknown may be, and the log it should have, shape ``(n_unknowns,)``."""
    at = {(r.stage, r.wire): row for row, r in enumerate(board.model.ratios)}
    choices, centre = [], []
    most = board.target.resistors[-1]
    long = {
        r.stage
        for r, product in zip(board.model.ratios, wanted.tolist(), strict=True)
        if r.kind == "integrator" and product > most * picked[r.stage, "C"]
    }
    for stage, what in board.unknowns.names:
        if what == "C" or what == "Rf":
            series = board.target.capacitors if what == "C" else board.target.resistors
            # A stage with a network of three keeps the capacitor that needs the least of it: offsets count by it.
            choices.append(plain((picked[stage, what],) if what == "C" and stage in long else series))
            centre.append(log(picked[stage, what]))
        elif what == -1:
            choices.append(start_ratios(board.target.resistors))
            centre.append(log(wanted[at[stage, -1]]))
        else:
            ratio = float(wanted[at[stage, int(what)]])
            ohms = ratio / picked[stage, "C"] if (stage, "C") in picked else ratio * picked.get((stage, "Rf"), 1.0)
            choices.append(resistor(ohms, board.target))
            centre.append(log(ohms))
    return choices, np.array(centre)


def _menu(board: _Board, choices: list[Choice], centre: Array) -> Menu:
    """Moves of an attempt: near values of resistors and start ratios; capacitors, feedbacks take their legs along."""
    names = board.unknowns.names
    moves: list[dict[int, float]] = []
    for column, ((stage, what), choice) in enumerate(zip(names, choices, strict=True)):
        if what == "C" or what == "Rf":
            legs = [c for c, (s, w) in enumerate(names) if s == stage and isinstance(w, int) and w >= 0]
            width = CAPACITOR_WIDTH if what == "C" else FEEDBACK_WIDTH
            near = choice.logs[choice.near(float(centre[column]), width)]
            for value in near[np.abs(near - centre[column]) > 1e-9]:
                # R times C and R over Rf stay: resistors fall where the capacitor grows, and grow with the feedback.
                shift = (centre[column] - value) * (1 if what == "C" else -1)
                nearest = [choices[c].logs[np.argmin(np.abs(choices[c].logs - centre[c] - shift))] for c in legs]
                moves.append({column: float(value), **dict(zip(legs, map(float, nearest), strict=True))})
        else:
            near = choice.logs[choice.near(float(centre[column]), WIDTH)]
            near = near[np.argsort(np.abs(near - centre[column]), kind="stable")[:MOST_NEAR]]
            moves += [{column: float(value)} for value in near]
    touched, value = np.zeros((len(names), len(moves))), np.zeros((len(names), len(moves)))
    for k, move in enumerate(moves):
        for column, wanted_log in move.items():
            touched[column, k], value[column, k] = 1.0, wanted_log
    return Menu(touched, value)


def _shift(board: _Board, y: Array) -> Array:
    """log of what switches and the op amp's finite bandwidth add to each R*C or ratio, shape ``(n_rows,)``.

    All legs of a stage share the operate switch, so that Ron counts as Ron * sum(1/R), and so do all legs from a source
    that is switched from the reference; at infinite gain an integrator of gains g is slower by 1 + sum(g)/w_t (Franco
    2019).
    """
    column = {name: c for c, name in enumerate(board.unknowns.names)}
    extra: dict[str, float] = {}
    for ratio in board.model.ratios:
        # What the summing node sees of a network of three is little more than its last, largest resistor.
        conductance = max(float(np.exp(-y[column[ratio.stage, ratio.wire]])), 1.0 / board.target.resistors[-1])
        if ratio.switched:
            extra[ratio.switched] = extra.get(ratio.switched, 0.0) + board.target.switch_on * conductance
        if ratio.kind == "integrator":
            slow = conductance / float(np.exp(y[column[ratio.stage, "C"]])) / board.target.op_amp.gain_bandwidth
            extra[ratio.stage] = extra.get(ratio.stage, 0.0) + board.target.switch_on * conductance + slow
    shares = [
        (extra[r.stage] if r.kind == "integrator" else 0.0, extra.get(r.switched, 0.0)) for r in board.model.ratios
    ]
    total: Array = np.log1p(np.array(shares).reshape(-1, 2)).sum(axis=1)
    return total


def _finish(board: _Board, y: Array, choices: list[Choice]) -> Values:
    """Split what is left over the scale factors and name the parts."""
    residual = board.unknowns.incidence @ y - board.constant + _shift(board, y)
    theta, worst = split_rest(board.matrix, residual, board.effect, board.model.low, board.model.high)
    errors = np.expm1(-(residual - board.matrix @ theta))
    parts = {
        name: choice.parts[int(np.argmin(np.abs(choice.logs - value)))]
        for name, choice, value in zip(board.unknowns.names, choices, y, strict=True)
    }
    return Values(parts, theta, worst, loop_errors(board.matrix, residual), errors)
