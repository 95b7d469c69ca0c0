"""Annealing of many candidate boards at once, over values of a grid, towards small loop errors.

Heat-bath steps (Geman and Geman 1984, IEEE Trans. PAMI 6) on a falling temperature (Kirkpatrick, Gelatt and Vecchi
1983, Science 220). The energy is the log of the loop errors' norm, so that one schedule serves errors of any size.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.joint import Crowd, Field, Indices

Array = NDArray[np.float64]
#: (columns, places of every option, what they change)
_Options: TypeAlias = tuple[Sequence[int], Sequence[Indices], tuple[Array, Array]]
#: Temperatures at the start and at the end, in e-folds of loop error; the last sweeps only go down.
HOT, COLD = 0.6, 0.08
#: Steps along its grid that a value may take in one move; on fine grids also far ones.
NEAR = np.arange(-5, 6)
FAR = np.array([-89, -34, -21, -13, -8, -5, -3, -2, -1, 0, 1, 2, 3, 5, 8, 13, 21, 34, 89])
#: The same for capacitors and for the feedback of summers, whose legs go along.
LEAD = np.arange(-2, 3)
#: Grids with a mean step below this count as fine.
FINE = 0.03
#: Pairs of values tried in each sweep, for each unknown.
PAIRS = 3


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
    """

    leads: tuple[tuple[int, tuple[int, ...], int], ...]
    followers: tuple[int, ...]
    pairs: tuple[tuple[int, int, int], ...]
    scales: tuple[tuple[tuple[int, ...], Array], ...] = ()


def find_moves(field: Field, names: Sequence[tuple[str, int | str]], matrix, own) -> Moves:
    """Moves of a board, by the names of its unknowns."""
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
    pairs = {}
    for loop in range(field.loops.shape[1]):
        inside = [u for u in followers if abs(field.loops[u, loop]) > 1e-9]
        pairs.update({(a, b): (a, b, loop) for a in inside for b in inside if a != b and (a, b) not in pairs})
    scales = []
    for column in range(matrix.shape[1]):
        rows = np.flatnonzero(matrix[:, column])
        scales.append((tuple(int(own[r]) for r in rows), matrix[rows, column]))
    return Moves(tuple(leads), tuple(followers), tuple(pairs.values()), tuple(scales))


def anneal(crowd: Crowd, moves: Moves, random: np.random.Generator, sweeps: int) -> None:
    """Move all candidates towards small loop errors, in place."""
    heat = np.geomspace(HOT, COLD, max(sweeps - 2, 1)).tolist() + [0.0, 0.0]
    for number, warmth in enumerate(heat):
        if number % WIN == WIN - 1 and number < len(heat) - 3:
            order = np.argsort(crowd.energy(), kind="stable")
            q = int(len(order) * SHARE)
            if q:
                for name in ("place", "y", "sums", "errors", "theta"):
                    getattr(crowd, name)[order[-q:]] = getattr(crowd, name)[order[:q]]
        for lead, legs, sign in moves.leads:
            _lead(crowd, lead, legs, sign, warmth, random)
        for touched, slopes in moves.scales:
            _scale(crowd, touched, slopes, warmth, random)
        for column in random.permutation(moves.followers):
            places = _near(crowd, int(column))
            _settle(crowd, ([int(column)], [places], crowd.change([int(column)], [places])), warmth, random)
        count = int(min(len(moves.pairs), PAIRS * len(moves.followers)))
        for pick in random.permutation(len(moves.pairs))[:count]:
            _pair(crowd, *moves.pairs[pick], warmth, random)


def _near(crowd: Crowd, column: int) -> Indices:
    """Places that one move reaches, shape ``(n_candidates, n_options)``."""
    grid = crowd.field.grids[column]
    fine = len(grid) > 1 and (grid[-1] - grid[0]) / (len(grid) - 1) < FINE
    return np.asarray(np.clip(crowd.place[:, column, None] + (FAR if fine else NEAR), 0, len(grid) - 1))


def _settle(crowd: Crowd, options: _Options, warmth: float, random: np.random.Generator) -> None:
    columns, places, changed = options
    energy = crowd.field.energy(*changed)
    crowd.take(columns, places, changed, _drawn(energy, warmth, random))


def _drawn(energy: Array, warmth: float, random: np.random.Generator) -> Indices:
    """Options drawn by their energy: the least, or by Boltzmann's law through Gumbel noise."""
    if warmth > 0:
        energy = energy - warmth * random.gumbel(size=energy.shape)
    return np.asarray(np.argmin(energy, axis=1))


def _pair(crowd: Crowd, one: int, other: int, loop: int, warmth: float, random: np.random.Generator) -> None:
    """Move one unknown, and another to the nearest values on either side that make their loop's error vanish."""
    field = crowd.field
    first = _near(crowd, one)
    step = field.grids[one][first] - crowd.y[:, one, None]
    left = crowd.errors[:, loop, None] + step * field.loops[one, loop]
    aim = crowd.y[:, other, None] - left / field.loops[other, loop]
    above = np.clip(np.searchsorted(field.grids[other], aim), 1, max(len(field.grids[other]) - 1, 1))
    second = np.concatenate([above - 1, np.minimum(above, len(field.grids[other]) - 1), crowd.place[:, other, None]], axis=1)
    first = np.concatenate([first, first, crowd.place[:, one, None]], axis=1)
    _settle(crowd, ([one, other], [first, second], crowd.change([one, other], [first, second])), warmth, random)


def _lead(crowd: Crowd, lead: int, legs: Sequence[int], sign: int, warmth: float, random: np.random.Generator) -> None:
    """Move a capacitor or feedback resistor; its legs follow and settle before the moves are compared."""
    field, count = crowd.field, len(LEAD)
    grid = field.grids[lead]
    wide = _repeated(crowd, count)
    goal = np.clip(crowd.place[:, lead, None] + LEAD, 0, len(grid) - 1).reshape(-1, 1)
    step = grid[goal[:, 0]] - wide.y[:, lead]
    places = [goal]
    for leg in legs:
        places.append(nearest_place(field.grids[leg], wide.y[:, leg] + sign * step)[:, None])
    columns = [lead, *legs]
    none = np.zeros(len(wide.place), dtype=np.intp)
    wide.take(columns, places, wide.change(columns, places), none)
    for leg in legs:
        around = np.clip(wide.place[:, leg, None] + np.arange(-2, 3), 0, len(field.grids[leg]) - 1)
        _settle(wide, ([leg], [around], wide.change([leg], [around])), 0.0, random)
    energy = wide.energy().reshape(-1, count)
    # Staying means staying: no leg moves where the lead does not.
    energy[:, count // 2] = crowd.energy()
    chosen = _drawn(energy, warmth, random)
    moved = np.flatnonzero(chosen != count // 2)
    rows = moved * count + chosen[moved]
    for name in ("place", "y", "sums", "errors", "theta"):
        getattr(crowd, name)[moved] = getattr(wide, name)[rows]


HITS = 6
WIN, SHARE = 4, 0.25


def _scale(crowd: Crowd, touched: Sequence[int], slopes: Array, warmth: float, random: np.random.Generator) -> None:
    """Move one scale factor or the speed so that one of its values lies exactly on the grid; the others follow."""
    field, count = crowd.field, len(crowd.place)
    every = np.arange(count)[:, None]
    which = random.integers(0, len(touched), (count, HITS))
    hop = random.integers(1, 4, (count, HITS)) * random.choice([-1, 1], (count, HITS))
    steps = np.zeros((count, HITS))
    for k, (u, slope) in enumerate(zip(touched, slopes, strict=True)):
        grid = field.grids[u]
        to = np.clip(crowd.place[:, u, None] + hop, 0, len(grid) - 1)
        steps = np.where(which == k, (grid[to] - crowd.y[:, u, None]) / slope, steps)
    places = []
    for u, slope in zip(touched, slopes, strict=True):
        goal = nearest_place(field.grids[u], crowd.y[:, u, None] + slope * steps)
        places.append(np.concatenate([crowd.place[:, u, None], goal], axis=1))
    _settle(crowd, (list(touched), places, crowd.change(list(touched), places)), warmth, random)


def nearest_place(grid: Array, wanted: Array) -> Indices:
    """Places of the grid's values nearest to wanted logs."""
    above = np.clip(np.searchsorted(grid, wanted), 1, max(len(grid) - 1, 1))
    below = above - 1
    above = np.minimum(above, len(grid) - 1)
    return np.asarray(np.where(grid[above] - wanted < wanted - grid[below], above, below))


def _repeated(crowd: Crowd, count: int) -> Crowd:
    return replace(
        crowd, **{n: np.repeat(getattr(crowd, n), count, axis=0) for n in ("place", "y", "sums", "errors", "theta")}
    )
