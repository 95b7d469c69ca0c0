"""Values from parts on hand: the same descent on loop errors, with pieces that are counted.

Every resistor and capacitor that the board needs is a slot; a slot holds one piece (a T leg three). An attempt begins
with an assignment of pieces to slots (Kuhn 1955, through scipy) at some scale factors and speed, and descends over
single and paired moves, exchanges among them, none of which takes more of a value than there is.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from math import exp, log

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.records import Patch
from patchplan.sizing.loops import find_circuits
from patchplan.sizing.losses import added_logs
from patchplan.sizing.model import Model
from patchplan.sizing.pieces import Menu, State, assigned, descend_counted, menu_of, pair_options, t_options
from patchplan.sizing.records import Target
from patchplan.sizing.search import Effect, merit, split_rest
from patchplan.sizing.shortage import find_shortage, in_reach
from patchplan.sizing.slots import EASY, Name, Slots, find_slots
from patchplan.sizing.speed_errors import COMFORTABLE
from patchplan.sizing.stock import PLENTY
from patchplan.sizing.values import Values, capacitor_merit, pick_feedback, wanted_products

Array = NDArray[np.float64]
#: By how hard to think: attempts, and the predicted error that is good enough, as a fraction of peak.
ATTEMPTS = {"low": (20, 2e-3), "normal": (250, 5e-4), "high": (2000, 5e-5)}
#: Boards with more slots than this take fewer attempts, down to one.
MANY_SLOTS = 25
#: Where single pieces leave a larger predicted error, as a fraction of peak, and pairs less than half of it, two stand
#: for one.
COARSE = 0.01
#: Attempts with pairs, whose menus are some three times as long, over those without.
FEWER_PAIRED = 0.25
#: Above the largest resistor by more than this, in logs, networks of three take the place of pairs.
NEAR_PAIRS = 0.6


def choose_stocked(
    model: Model,
    patch: Patch,
    target: Target,
    effect: Effect,
    *,
    comfortable: Mapping[str, float],
    think: str = "normal",
    seed: int = 1,
) -> Values:
    """Values from the parts on hand; ``Values.missing`` says what the stock lacks.

    Parameters as for :func:`patchplan.sizing.trial.choose_values`. Measured parts are searched to the end, as their
    values leave no other error.
    """
    board = find_slots(model, patch, target, effect, comfortable)
    found = _searched(replace(board, paired=target.pairs), think, seed)
    if found is not None and not target.pairs and (found.worst > COARSE or not in_reach(found)):
        paired = _searched(replace(board, paired=True), think, seed)
        better = paired is not None and (paired.worst < found.worst / 2 or not in_reach(found))
        found = paired if better else found
    if found is not None and in_reach(found):
        return found
    missing, wished = find_shortage(
        lambda other: _searched(find_slots(model, patch, other, effect, comfortable), "low", seed), target
    )
    if wished is not None:
        return replace(wished, missing=missing)
    return found or _any_number(board, seed)


def _any_number(board: Slots, seed: int) -> Values:
    """Values with any number of every piece on hand, where there are fewer pieces than slots."""
    plenty = replace(board, shelf=replace(board.shelf, count=np.full_like(board.shelf.count, PLENTY)))
    found = _searched(plenty, "low", seed)
    assert found is not None
    capacitors = int(board.capacitive.sum())
    text = f"The stock has too few parts: {len(board.names) - capacitors} resistors or more and {capacitors} capacitors"
    return replace(found, missing=(f"{text} are needed, and more of those on hand alone would not do.",))


def _searched(board: Slots, think: str, seed: int) -> Values | None:
    """The best of several attempts; None where there are fewer pieces than slots."""
    random = np.random.default_rng(seed)
    most, enough = ATTEMPTS[think]
    measured = any(p.serial for p in (*(board.target.resistor_piles or ()), *(board.target.capacitor_piles or ())))
    share = min(1.0, MANY_SLOTS / max(len(board.names), 1))
    attempts = []
    fewer = FEWER_PAIRED if board.paired else 1.0
    for number in range(max(1, round(fewer * most * share**1.5))):
        found = _attempt(board, number, random)
        if found is None:
            break
        attempts.append(found)
        if found[0] < enough and not measured:
            break
    attempts.sort(key=lambda found: found[0])
    if think != "high" and not measured:
        for cost, state, menu in attempts[:3]:
            _fewer_values(board, state, menu, max(cost, enough))
    best = [_finish(board, state) for _, state, _ in attempts[:3]]
    return min(best, key=lambda v: merit(board.effect, -np.log1p(np.maximum(v.errors, -1 + 1e-9))), default=None)


def _attempt(board: Slots, number: int, random: np.random.Generator) -> tuple[float, State, Menu] | None:
    """Assign and descend from one starting point: the middle first, then scattered ones."""
    model = board.model
    theta = model.centre
    if number:
        theta = theta + random.uniform(-0.35, 0.35, len(theta)) * (model.high - model.low)
    wanted = wanted_products(model, theta)
    state = State(np.zeros(len(board.names)), np.zeros((len(board.names), len(board.shelf.value)), dtype=np.int64), {})

    def noise(shape: tuple[int, ...]) -> Array:
        return random.exponential(0.5, shape) if number else np.zeros(shape)

    if not _place_anchors(board, state, wanted, noise):
        return None
    menu = _place_rest(board, state, wanted)
    if menu is None:
        return None
    return _settled(board, state, menu), state, menu


def _fewer_values(board: Slots, state: State, menu: Menu, allowed: float) -> None:
    """Give slots that alone hold a value one that others hold, in place, as long as the cost stays allowed."""
    for slot in range(len(board.names)):
        uses = (state.holds > 0).sum(axis=0)
        before = float(state.y[slot]), state.parts[slot]
        if len(before[1]) > 1 or uses[before[1][0]] > 1:
            continue
        left = state.left(board.shelf)
        for move in np.flatnonzero(menu.slot == slot).tolist():
            (value, *more) = menu.parts[move]
            if not more and uses[value] and left[value] and value != before[1][0]:
                state.put(slot, float(menu.value[move]), (value,))
                if _cost(board, state) <= allowed:
                    break
                state.put(slot, *before)


def _settled(board: Slots, state: State, menu: Menu) -> float:
    """Descend in place; what is left, see :func:`_cost`."""
    effect = board.loops.basis.T @ (board.loops.shape @ board.incidence)
    for _ in range(2):
        offset = board.constant - _shift(board, state.y)

        def errors(y: Array, offset: Array = offset) -> Array:
            return board.loops.errors(board.incidence @ y - offset)

        descend_counted(state, menu, effect, errors, board.shelf)
    return _cost(board, state)


def _cost(board: Slots, state: State) -> float:
    """Loop errors, and what staying inside the bounds of theta costs."""
    residual = board.incidence @ state.y - board.constant + _shift(board, state.y)
    left = board.loops.errors(residual)
    return float(np.sqrt(left @ left)) + board.loops.outside(residual, board.model.low, board.model.high)


def _place_anchors(board: Slots, state: State, wanted: Array, noise: Callable[[tuple[int, ...]], Array]) -> bool:
    """Capacitors, feedback resistors and those that hold start values; whether there are enough."""
    rows: dict[str, list[int]] = {}
    for row, ratio in enumerate(board.model.ratios):
        if ratio.kind != "start":
            rows.setdefault(ratio.stage, []).append(row)
    capacitors = [i for i, (_, what) in enumerate(board.names) if what == "C"]
    merits = np.array([
        capacitor_merit(wanted[rows[stage]], board.target, board.comfortable.get(stage, COMFORTABLE))[0]
        if stage in rows else np.abs(np.log(np.array(board.target.capacitors) / 1e-8))
        for stage, _ in (board.names[i] for i in capacitors)
    ]).reshape(len(capacitors), -1)  # fmt: skip
    ready = assigned(state, board.shelf, capacitors, merits + noise(merits.shape), board.shelf.capacitive)
    others = [i for i, (_, what) in enumerate(board.names) if what in ("Rf", "S2")]
    near = [
        log(pick_feedback(wanted[rows[stage]], board.target))
        if what == "Rf" and stage in rows
        else log(EASY[str(what)])
        for stage, what in (board.names[i] for i in others)
    ]
    values = np.log(board.shelf.value[~board.shelf.capacitive])
    costs = np.abs(values[None, :] - np.array(near)[:, None]).reshape(len(others), len(values))
    # Legs come by the exact pieces later: what lies within a factor is as good, and scattered from start to start.
    return ready and assigned(state, board.shelf, others, costs + noise(costs.shape), ~board.shelf.capacitive)


def _place_rest(board: Slots, state: State, wanted: Array) -> Menu | None:
    """Legs and the other resistors, and the menu of every slot around what it should hold; None where too few."""
    centre, at = state.y.copy(), dict[Name, int]()
    at.update(((r.stage, r.wire), row) for row, r in enumerate(board.model.ratios))
    column = {name: i for i, name in enumerate(board.names)}
    ts: dict[int, list[tuple[float, tuple[int, ...]]]] = {}
    slots, costs = [], []
    values = np.log(board.shelf.value[~board.shelf.capacitive])
    for i, (stage, what) in enumerate(board.names):
        if i in state.parts:
            continue
        if (stage, what) in at or what == "S1":
            centre[i] = _wanted_log(board, state, stage, what, wanted, at, column)
            if what != "S1" and centre[i] > values[-1] + (NEAR_PAIRS if board.paired else 0.03):
                ts[i] = t_options(board.shelf, float(centre[i]))
            elif what != "S1" and board.paired:
                ts[i] = pair_options(board.shelf, float(centre[i]))
            costs.append(np.abs(values - centre[i]))
        else:
            centre[i] = log(EASY.get(str(what), 4e4))
            costs.append(0.01 * np.abs(values - centre[i]))
        slots.append(i)
    for i, options in ts.items():
        left = state.left(board.shelf)
        fits = [o for o in options if all(o[1].count(v) <= left[v] for v in o[1])]
        if fits:
            state.put(i, *min(fits, key=lambda o: abs(o[0] - centre[i])))
    waiting = [k for k, i in enumerate(slots) if i not in state.parts]
    table = np.array([costs[k] for k in waiting]).reshape(len(waiting), len(values))
    if not assigned(state, board.shelf, [slots[k] for k in waiting], table, ~board.shelf.capacitive):
        return None
    moving = [i for i in range(len(board.names)) if board.incidence[:, i].any()]
    return menu_of(board.shelf, moving, centre, board.capacitive, ts)


def _wanted_log(
    board: Slots, state: State, stage: str, what: int | str, wanted: Array, at: Mapping[Name, int],
    column: Mapping[Name, int],
) -> float:  # fmt: skip
    """log of the resistor that a slot should hold beside the anchor of its stage."""
    if what == "S1":
        return float(state.y[column[stage, "S2"]]) - log(wanted[at[stage, -1]])
    product = log(wanted[at[stage, what]])
    if (stage, "C") in column:
        return product - float(state.y[column[stage, "C"]])
    return product + (float(state.y[column[stage, "Rf"]]) if (stage, "Rf") in column else 0.0)


def _shift(board: Slots, y: Array) -> Array:
    """What switches and bandwidth add to each row, shape ``(n_rows,)``."""
    column = {name: i for i, name in enumerate(board.names)}
    ones = np.ones(len(board.model.ratios))
    ohm, farad = ones.copy(), ones.copy()
    for row, ratio in enumerate(board.model.ratios):
        if ratio.kind != "start":
            # What the summing node sees of a network of three is little more than its last, largest resistor.
            ohm[row] = min(float(np.exp(y[column[ratio.stage, ratio.wire]])), board.target.resistors[-1])
        if ratio.kind == "integrator":
            farad[row] = np.exp(y[column[ratio.stage, "C"]])
    return added_logs(board.model.ratios, board.target, ohm, farad)


def _finish(board: Slots, state: State) -> Values:
    """Split what is left over the scale factors and name the parts."""
    residual = board.incidence @ state.y - board.constant + _shift(board, state.y)
    theta, worst = split_rest(board.matrix, residual, board.effect, board.model.low, board.model.high)
    errors = np.expm1(-(residual - board.matrix @ theta))
    held = {name: tuple(float(board.shelf.value[v]) for v in state.parts[i]) for i, name in enumerate(board.names)}
    # Two in series are more than either, two in parallel less.
    joins = {
        name: "series" if exp(state.y[i]) > max(held[name]) else "parallel"
        for i, name in enumerate(board.names)
        if len(state.parts[i]) == 2
    }
    for stage, what in board.names:
        if what == "S1":
            held[stage, -1] = held.pop((stage, "S1")) + held.pop((stage, "S2"))
    for stage, (leg, feedback) in board.pairs.items():
        held |= {(stage, 0): (leg,), (stage, "Rf"): (feedback,)}
    return Values(held, theta, worst, find_circuits(board.model).errors(residual), errors, joins=joins)
