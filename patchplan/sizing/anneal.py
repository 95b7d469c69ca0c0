"""Annealing of many candidate boards at once, over values of a grid, towards small loop errors.

Heat-bath steps (Geman and Geman 1984, IEEE Trans. PAMI 6) on a falling temperature (Kirkpatrick, Gelatt and Vecchi
1983, Science 220); from time to time the worst candidates become copies of the best. The energy is the log of the loop
errors' norm, so that one schedule serves errors of any size.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.crowd import Crowd, Field, Indices, nearest_place
from patchplan.sizing.model import Ratio

Array = NDArray[np.float64]
#: Temperatures at the start and at the end, in e-folds of loop error; the last sweeps only go down.
HOT, COLD, LAST = 0.3, 0.06, 2
#: They fall with the number of errors beyond this, as one error then moves the norm of all less.
FEW = 14
#: After so many sweeps this share of the candidates is replaced by copies of the best.
RENEWED, SHARE = 4, 0.25
#: Steps along its grid that a value may take in one move; on grids of a mean step below ``FINE`` also far ones.
NEAR = np.arange(-5, 6)
FAR = np.array([-89, -34, -21, -13, -8, -5, -3, -2, -1, 0, 1, 2, 3, 5, 8, 13, 21, 34, 89])
FINE = 0.03
#: The same for capacitors and for the feedback of summers, whose legs go along, and for each leg after that.
LEAD, LEG = np.arange(-2, 3), np.arange(-2, 3)
#: Exact hits of a scale factor that are tried in one move, and how many steps of the grid away they are at most.
HITS, HOP = 16, 3


@dataclass(frozen=True)
class Moves:
    """What may move.

    Attributes
    ----------
    leads
        (capacitor or feedback, its legs, -1 where legs fall as it grows or 1).
    followers
        Unknowns that move alone.
    pairs
        (one, other, loop): two unknowns of one loop, the second of which takes up what the first does.
    scales
        (unknowns, slopes) of every scale factor and of the speed: how they move with its log.
    """

    leads: tuple[tuple[int, tuple[int, ...], int], ...]
    followers: tuple[int, ...]
    pairs: tuple[tuple[int, int, int], ...]
    scales: tuple[tuple[tuple[int, ...], Array], ...]


def find_moves(
    field: Field, names: Sequence[tuple[str, int | str]], ratios: Sequence[Ratio], matrix: Array, loops: int
) -> Moves:
    """Moves of a board, by the names of its unknowns, its rows and A; pairs within the first ``loops`` measures."""
    at = {name: column for column, name in enumerate(names)}
    legs: dict[str, list[int]] = {}
    for column, (stage, what) in enumerate(names):
        if isinstance(what, int) and what >= 0:
            legs.setdefault(stage, []).append(column)
    leads = [
        (column, tuple(legs.get(stage, ())), -1 if what == "C" else 1)
        for column, (stage, what) in enumerate(names)
        if isinstance(what, str)
    ]
    followers = [column for column, (_, what) in enumerate(names) if isinstance(what, int)]
    pairs: dict[tuple[int, int], tuple[int, int, int]] = {}
    for loop, shares in enumerate(field.loops.T[:loops]):
        inside = [u for u in followers if abs(shares[u]) > 1e-9]
        for one in inside:
            for other in inside:
                if one != other:
                    pairs.setdefault((one, other), (one, other, loop))
    own = np.array([at[r.stage, r.wire] for r in ratios], dtype=np.intp)
    scales = [(tuple(own[rows].tolist()), matrix[rows, c]) for c, rows in enumerate(map(np.flatnonzero, matrix.T))]
    return Moves(tuple(leads), tuple(followers), tuple(pairs.values()), tuple(s for s in scales if s[0]))


def anneal(
    crowd: Crowd,
    moves: Moves,
    random: np.random.Generator,
    sweeps: int,
    enough: Callable[[Indices], bool],
    *,
    hot: float = HOT,
) -> None:
    """Move all candidates towards small loop errors, in place, until the best one's places are good enough."""
    scale = min(1.0, FEW / max(crowd.state.shape[1], 1)) ** 1.5
    heat = [*(scale * np.geomspace(hot, COLD, max(sweeps - LAST, 1))).tolist(), *[0.0] * LAST]
    for number, warmth in enumerate(heat):
        if not moves.followers:
            return
        if number % RENEWED == 0 and warmth:
            order = np.argsort(crowd.energy(), kind="stable")
            if enough(crowd.place[order[0]]):
                return
            count = int(len(order) * SHARE) if number else 0
            crowd.copy(crowd, order[:count], order[len(order) - count :])
        _sweep(crowd, moves, warmth, random)


def _sweep(crowd: Crowd, moves: Moves, warmth: float, random: np.random.Generator) -> None:
    for lead, legs, sign in moves.leads:
        _lead(crowd, lead, legs, sign, warmth, random)
    for touched, slopes in moves.scales:
        _scale(crowd, touched, slopes, warmth, random)
    for column in random.permutation(moves.followers).tolist():
        _settle(crowd, [column], [_near(crowd, column)], warmth, random)
    for pick in random.permutation(len(moves.pairs))[: len(moves.followers)].tolist():
        _pair(crowd, moves.pairs[pick], warmth, random)


def _near(crowd: Crowd, column: int) -> Indices:
    """Places that one move reaches, shape ``(n_candidates, n_options)``."""
    grid = crowd.field.grids[column]
    fine = len(grid) > 1 and (grid[-1] - grid[0]) / (len(grid) - 1) < FINE
    return np.asarray(np.clip(crowd.place[:, column, None] + (FAR if fine else NEAR), 0, len(grid) - 1))


def _settle(
    crowd: Crowd, columns: Sequence[int], places: Sequence[Indices], warmth: float, random: np.random.Generator
) -> None:
    """Move each candidate to one of its options for some unknowns, drawn by energy."""
    changed = crowd.change(columns, places)
    crowd.take(columns, places, changed, _drawn(crowd.field.energy(changed), warmth, random))


def _drawn(energy: Array, warmth: float, random: np.random.Generator) -> Indices:
    """Options drawn by their energy: the least, or by Boltzmann's law through Gumbel noise."""
    if warmth > 0:
        energy = energy - warmth * random.gumbel(size=energy.shape)
    return np.asarray(np.argmin(energy, axis=1))


def _pair(crowd: Crowd, pair: tuple[int, int, int], warmth: float, random: np.random.Generator) -> None:
    """Move one unknown, and another to the values on either side of where their loop's error vanishes."""
    field, (one, other, loop) = crowd.field, pair
    first = _near(crowd, one)
    step = field.grids[one][first] - crowd.y[:, one, None]
    left = crowd.errors[:, loop, None] + step * field.loops[one, loop]
    grid = field.grids[other]
    above = np.searchsorted(grid, crowd.y[:, other, None] - left / field.loops[other, loop])
    stay = [crowd.place[:, u, None] for u in (one, other)]
    second = np.concatenate([np.maximum(above - 1, 0), np.minimum(above, len(grid) - 1), stay[1]], axis=1)
    first = np.concatenate([first, first, stay[0]], axis=1)
    _settle(crowd, [one, other], [first, second], warmth, random)


def _lead(crowd: Crowd, lead: int, legs: Sequence[int], sign: int, warmth: float, random: np.random.Generator) -> None:
    """Move a capacitor or feedback resistor; its legs follow and settle before the moves are compared."""
    field, count = crowd.field, len(LEAD)
    grid = field.grids[lead]
    if len(grid) == 1:
        return
    wide = crowd.repeated(count)
    goal = np.clip(crowd.place[:, lead, None] + LEAD, 0, len(grid) - 1).reshape(-1, 1)
    step = sign * (grid[goal[:, 0]] - wide.y[:, lead])
    places = [goal, *(nearest_place(field.grids[leg], wide.y[:, leg] + step)[:, None] for leg in legs)]
    _settle(wide, [lead, *legs], places, 0.0, random)
    for leg in legs:
        around = np.clip(wide.place[:, leg, None] + LEG, 0, len(field.grids[leg]) - 1)
        _settle(wide, [leg], [around], 0.0, random)
    chosen = _drawn(wide.energy().reshape(-1, count), warmth, random)
    crowd.copy(wide, np.arange(len(chosen)) * count + chosen, np.arange(len(chosen)))


def _scale(crowd: Crowd, touched: Sequence[int], slopes: Array, warmth: float, random: np.random.Generator) -> None:
    """Move one scale factor or the speed so that one of its values lies exactly on the grid; the others follow."""
    field, shape = crowd.field, (len(crowd.place), HITS)
    which = random.integers(0, len(touched), shape)
    hop = random.integers(1, HOP + 1, shape) * random.choice([-1, 1], shape)
    steps = np.zeros(shape)
    for k, (u, slope) in enumerate(zip(touched, slopes.tolist(), strict=True)):
        grid = field.grids[u]
        to = np.clip(crowd.place[:, u, None] + hop, 0, len(grid) - 1)
        steps = np.where(which == k, (grid[to] - crowd.y[:, u, None]) / slope, steps)
    steps = np.concatenate([np.zeros((shape[0], 1)), steps], axis=1)
    goals = [crowd.y[:, u, None] + slope * steps for u, slope in zip(touched, slopes.tolist(), strict=True)]
    places = [nearest_place(field.grids[u], goal) for u, goal in zip(touched, goals, strict=True)]
    _settle(crowd, touched, places, warmth, random)
