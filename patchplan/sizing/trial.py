"""Values of a board: rounds of many candidates, until what is left hides in the tolerances of the parts."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.anneal import Moves, anneal, find_moves
from patchplan.sizing.crowd import Crowd, Field, Indices, make_field, nearest_place
from patchplan.sizing.large import choose_large, settled_start
from patchplan.sizing.loops import Circuits, find_circuits
from patchplan.sizing.losses import residual_of
from patchplan.sizing.model import Model, matrix_of
from patchplan.sizing.pairs import legs_to_pair, legs_with_pairs
from patchplan.sizing.records import Target
from patchplan.sizing.search import Effect, merit, split_rest
from patchplan.sizing.values import (
    Choice,
    Unknowns,
    Values,
    choices_of,
    find_unknowns,
    pick_stage_values,
    plain,
    wanted_products,
)

Array = NDArray[np.float64]
#: By how hard to think: most rounds, and the part of the spread between boards below which errors are good enough.
ROUNDS = {"low": (1, 0.3), "normal": (2, 0.1), "high": (8, 0.005)}
#: Candidates of a round, and its sweeps over all values; fewer candidates for boards with more ratios than ``ROOMY``.
CANDIDATES, SWEEPS, ROOMY = 32, 30, 16
#: The error that is good enough is at most this fraction of peak, however much boards differ, and a loop's at most so
#: many times that part of its own spread, whether or not a watched signal shows it.
MOST_ERROR, UNSEEN = 1.5e-3, 3.0
#: Boards with more ratios than this take only the search that grows no faster than the board.
LARGE = 70
#: With pairs: loop errors that are good enough; those aimed at as legs are chosen, and how often that is halved.
PAIR_LIMIT, PAIR_GOAL, PAIR_TRIES = 8e-4, 1e-3, 5
#: How far capacitors may move from the middle of those chosen from before, in logs: four steps of E6.
PAIR_WIDTH = 1.7
#: Candidates without pairs that are tried, copies of each that settle, and their temperature at first.
PAIRED, PAIR_CANDIDATES, PAIR_HOT = 6, 12, 0.3
#: Candidates of each round that are finished and compared.
FINISHED = 8
#: What a different value more may cost in error: little where errors matter, much where tolerances hide them, which is
#: where at least ``COARSE`` of the spread is good enough.
PRICE, PRICE_HIDDEN, COARSE = 0.02, 0.3, 0.05
#: Ways in which loop errors move the watched signals together: at most so many, each at least this share of the first;
#: the first counts this much beside a loop.
MOST_WAYS, LEAST_WAY, TOGETHER = 6, 0.1, 2.0
#: Where the first candidate of a round begins in theta: its middle; the others are scattered this share of the bounds.
SCATTER = 0.35


@dataclass(frozen=True)
class _Board:
    """What all candidates share."""

    model: Model
    target: Target
    unknowns: Unknowns
    choices: tuple[Choice, ...]
    matrix: Array
    effect: Effect
    circuits: Circuits
    measures: tuple[Array, Array]
    field: Field
    moves: Moves
    comfortable: Mapping[str, float]


def choose_values(
    model: Model,
    target: Target,
    effect: Effect,
    *,
    comfortable: Mapping[str, float] | None = None,
    think: str = "normal",
    seed: int = 1,
) -> Values:
    """Search R, C, scale factors and speed together.

    Parameters
    ----------
    effect
        What residuals of the model's rows do to the watched signals.
    comfortable
        Stage -> resistance its capacitor is chosen for [ohm], where the usual one does not serve.
    think
        Key of :data:`ROUNDS`.
    seed
        Of the starting points; the same seed gives the same values.
    """
    circuits = find_circuits(model)
    if len(model.ratios) > LARGE:
        return choose_large(model, target, circuits, comfortable=comfortable or {})
    board = _board(model, target, effect, circuits, comfortable or {})
    random = np.random.default_rng(seed)
    rounds, share = ROUNDS[think]
    found: list[Values] = []
    places: list[Indices] = []
    for number in range(max(1, round(rounds * min(1.0, 3 * ROOMY / max(len(model.ratios), 1))))):
        crowd = Crowd.at(board.field, _starts(board, random, first=number == 0))
        anneal(crowd, board.moves, random, SWEEPS, lambda place: _hidden(board, _finish(board, place), share))
        order = np.argsort(crowd.energy(), kind="stable")
        distinct = list({crowd.place[k].tobytes(): k for k in order[::-1]}.values())[::-1]
        places += [crowd.place[k] for k in distinct[:FINISHED]]
        found += [_finish(board, place) for place in places[len(found) :]]
        # Without loops scale factors take up everything, in one round as well as in many.
        if not circuits.rows or any(_hidden(board, values, share) for values in found):
            break
    if not target.pairs:
        good = [values for values in found if _hidden(board, values, share)] if share >= COARSE else []
        return min(good or found, key=lambda values: _priced(board, values, PRICE_HIDDEN if good else PRICE))
    tried = sorted(range(len(found)), key=lambda k: float(np.abs(found[k].loop_errors).max(initial=0.0)))
    paired = [_paired(board, found[k], places[k], random) for k in tried[:PAIRED]]
    return min(paired, key=lambda v: (_out_of_line(v) > PAIR_LIMIT, len(v.joins), _priced(board, v, PRICE)))


def _out_of_line(values: Values) -> float:
    return float(np.abs(values.loop_errors).max(initial=0.0))


def _paired(board: _Board, values: Values, place: Indices, random: np.random.Generator) -> Values:
    """The same board with pairs of resistors in the fewest legs that bring every loop into line."""
    loops = len(board.circuits.rows)
    legs = [u for u, (_, what) in enumerate(board.unknowns.names) if isinstance(what, int) and what >= 0]
    free = [u for u in legs if len(board.choices[u].parts[place[u]]) == 3]
    legs = [u for u in legs if u not in free]
    errors = Crowd.at(board.field, place[None]).errors[0, :loops]
    best, opened = values, 0
    for halving in range(PAIR_TRIES + 1):
        if _out_of_line(best) <= PAIR_LIMIT:
            break
        chosen = legs_to_pair(errors, board.field.loops[:, :loops], free, legs, PAIR_GOAL / 2**halving)
        if halving == PAIR_TRIES:
            best = min(best, _settled_pairs(board, place, [*free, *legs], random), key=_out_of_line)
        elif len(chosen) > opened:
            opened = len(chosen)
            best = min(best, _settled_pairs(board, place, chosen, random), key=_out_of_line)
    return best


def _settled_pairs(board: _Board, place: Indices, legs: list[int], random: np.random.Generator) -> Values:
    """The best board near one when pairs are allowed in some legs."""
    wide = _opened(board, legs)
    logs = [c.logs[k : k + 1] for c, k in zip(board.choices, place, strict=True)]
    at = np.array([nearest_place(c.logs, x) for c, x in zip(wide.choices, logs, strict=True)])
    crowd = Crowd.at(wide.field, np.repeat(at.T, PAIR_CANDIDATES, axis=0))
    anneal(crowd, board.moves, random, SWEEPS, lambda _: False, hot=PAIR_HOT)
    return _finish(wide, crowd.place[int(np.argmin(crowd.energy()))])


def _opened(board: _Board, legs: list[int]) -> _Board:
    """The board with pairs allowed in some legs, and other capacitors in their stages."""
    choices, names = list(board.choices), board.unknowns.names
    for u in legs:
        choices[u] = legs_with_pairs(board.target.resistors, len(choices[u].parts[-1]) == 3)
    for c, (stage, what) in enumerate(names):
        if what == "C" and any(names[u][0] == stage for u in legs):
            # A lone loop has little else to choose from: pairs leave gaps of 0.3 %.
            middle = float(choices[c].logs.mean())
            choices[c] = plain(tuple(v for v in board.target.capacitors if abs(log(v) - middle) <= PAIR_WIDTH))
    shares, weight = board.measures
    constant = matrix_of(board.model)[1]
    field = make_field(board.model, board.target, board.unknowns, choices, board.matrix, constant, shares, weight)
    return replace(board, choices=tuple(choices), field=field)


def _board(
    model: Model, target: Target, effect: Effect, circuits: Circuits, comfortable: Mapping[str, float]
) -> _Board:
    matrix, constant = matrix_of(model)
    unknowns = find_unknowns(model.ratios, model.feedback)
    wanted = wanted_products(model, model.centre)
    picked = pick_stage_values(model, target, wanted, comfortable, lambda: 0)
    choices = choices_of(unknowns, target, picked, _centre(model, unknowns, wanted, picked))
    measures = _measures(circuits, effect)
    field = make_field(model, target, unknowns, choices, matrix, constant, *measures)
    moves = find_moves(field, unknowns.names, model.ratios, matrix, len(circuits.rows))
    return _Board(model, target, unknowns, choices, matrix, effect, circuits, measures, field, moves, comfortable)


def _measures(circuits: Circuits, effect: Effect) -> tuple[Array, Array]:
    """What the search makes small: every loop's error, and what all of them together do to the watched signals.

    Returns
    -------
    tuple of Array
        Shares of the rows, shape ``(n_rows, n_measures)``, and weights: a loop counts from a half to one by how far it
        moves a watched signal, so that none is left to itself.
    """
    shares = circuits.dense(effect.response.shape[1])
    # An error of one loop alone, as the smallest changes of its rows that make it.
    moved = effect.response @ np.linalg.pinv(shares.T)
    most = np.abs(moved).max(axis=0, initial=0.0)
    weight = 0.5 + 0.5 * most / (float(most.max(initial=0.0)) or 1.0)
    if not moved.size:
        return shares, weight
    _, size, ways = np.linalg.svd(moved / np.sqrt(len(moved)), full_matrices=False)
    kept = np.flatnonzero(size[:MOST_WAYS] > LEAST_WAY * size[0])
    together = TOGETHER * size[kept] / size[0] * ways[kept].T
    return np.hstack([shares, shares @ together]), np.concatenate([weight, np.ones(len(kept))])


def _starts(board: _Board, random: np.random.Generator, *, first: bool) -> Indices:
    """Places of a round's candidates: scale factors moved to where many rows hit values, shape ``(n, n_unknowns)``."""
    model, target = board.model, board.target
    count = max(8, round(CANDIDATES * min(1.0, ROOMY / max(len(model.ratios), 1))))
    places = []
    for number in range(count):
        plain = first and number == 0
        theta = model.centre
        theta = theta if plain else theta + random.uniform(-SCATTER, SCATTER, len(theta)) * (model.high - model.low)
        rank: Callable[[], int] = (lambda: 0) if plain else (lambda: int(random.integers(0, 3)))
        picked = pick_stage_values(model, target, wanted_products(model, theta), board.comfortable, rank)
        theta = settled_start(model, target, theta, picked)
        centre = _centre(model, board.unknowns, wanted_products(model, theta), picked)
        places.append([int(nearest_place(c.logs, centre[u])) for u, c in enumerate(board.choices)])
    return np.array(places, dtype=np.intp).reshape(count, len(board.choices))


def _centre(model: Model, unknowns: Unknowns, wanted: Array, picked: Mapping[tuple[str, int | str], float]) -> Array:
    """Log that each unknown should have for the products wanted, shape ``(n_unknowns,)``."""
    row = {(r.stage, r.wire): i for i, r in enumerate(model.ratios)}
    centre = []
    for stage, what in unknowns.names:
        if isinstance(what, str):
            centre.append(picked[stage, what])
            continue
        ratio = float(wanted[row[stage, what]])
        if what >= 0:
            ratio *= 1.0 / picked[stage, "C"] if (stage, "C") in picked else picked.get((stage, "Rf"), 1.0)
        centre.append(ratio)
    return np.asarray(np.log(np.array(centre)))


def _finish(board: _Board, place: Indices) -> Values:
    """Split what is left over the scale factors and name the parts."""
    model = board.model
    parts = {n: c.parts[k] for n, c, k in zip(board.unknowns.names, board.choices, place.tolist(), strict=True)}
    joined = zip(board.unknowns.names, board.choices, place.tolist(), strict=True)
    joins = {name: join for name, c, k in joined if (join := c.join(k))}
    residual = residual_of(model, board.target, parts, joins)
    theta, worst = split_rest(board.matrix, residual, board.effect, model.low, model.high)
    errors = np.expm1(-(residual - board.matrix @ theta))
    return Values(parts, theta, worst, board.circuits.errors(residual), errors, joins=joins)


def _logs(values: Values) -> Array:
    logs: Array = -np.log1p(np.maximum(values.errors, -1 + 1e-9))
    return logs


def _hidden(board: _Board, values: Values, share: float) -> bool:
    """Whether the errors left are below a share of what tolerances spread, in the watched signals and in every loop."""
    resistor, capacitor = (t / np.sqrt(3) for t in (board.target.resistor_tolerance, board.target.capacitor_tolerance))
    sigma = np.array([capacitor if what == "C" else resistor for _, what in board.unknowns.names])
    spread = np.sqrt((((board.effect.response @ board.unknowns.incidence) * sigma) ** 2).sum(axis=1)).max(initial=0.0)
    seen = np.abs(board.effect.response @ _logs(values)).max(initial=0.0)
    loops = np.abs(values.loop_errors).max(initial=0.0)
    return bool(
        seen <= min(share * spread, 10 * share * MOST_ERROR) and loops <= UNSEEN * share * np.hypot(resistor, capacitor)
    )


def _priced(board: _Board, values: Values, price: float) -> float:
    """What the watched signals and the coefficients are off, with a price on every different value to be bought."""
    resistors = {ohm for (_, what), parts in values.parts.items() if what != "C" for ohm in parts}
    capacitors = {parts for (_, what), parts in values.parts.items() if what == "C"}
    return merit(board.effect, _logs(values)) * (1.0 + price) ** (len(resistors) + len(capacitors))
