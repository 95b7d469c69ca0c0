"""Counted pieces in slots: assignment, menus, and a descent that takes no more of a value than there is."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.networks import networks
from patchplan.sizing.records import Leg

Array = NDArray[np.float64]
Counts = NDArray[np.int64]
#: A menu holds the values this near to the wanted one in logs, and never fewer than so many.
WIDTH, LEAST_MENU = 0.3, 8
#: Pairs are tried among this many of the best single moves; at most so many moves are taken, and at most so many pairs
#: looked at for each.
MOST_PAIRED, MOST_MOVES, MOST_LOOKS = 120, 200, 4000
#: T legs that a menu holds.
MOST_TS = 40
#: A move has to better the squared loop errors by this.
LEAST_GAIN = 1e-14


@dataclass(frozen=True)
class Shelf:
    """Values on hand, resistors before capacitors, and how many of each; shape ``(n_values,)``."""

    value: Array
    count: Counts
    capacitive: NDArray[np.bool_]


@dataclass
class State:
    """What the slots hold.

    Attributes
    ----------
    y
        log of the value, of the transfer resistance for a T, shape ``(n_slots,)``.
    holds
        Pieces of each value in each slot, shape ``(n_slots, n_values)``.
    parts
        Slot -> positions of the values in it.
    """

    y: Array
    holds: Counts
    parts: dict[int, tuple[int, ...]]

    def put(self, slot: int, log_value: float, parts: tuple[int, ...]) -> None:
        """Put pieces of these values into a slot, instead of what it holds."""
        self.y[slot], self.parts[slot] = log_value, parts
        self.holds[slot] = np.bincount(parts, minlength=self.holds.shape[1])

    def left(self, shelf: Shelf) -> Counts:
        """Pieces of each value that no slot holds, shape ``(n_values,)``."""
        left: Counts = shelf.count - self.holds.sum(axis=0)
        return left


@dataclass(frozen=True)
class Menu:
    """Moves: move k puts ``parts[k]``, whose log is ``value[k]``, into slot ``slot[k]``; ``holds`` as in State."""

    slot: NDArray[np.intp]
    value: Array
    parts: tuple[tuple[int, ...], ...]
    holds: Counts


def assigned(state: State, shelf: Shelf, slots: Sequence[int], costs: Array, which: NDArray[np.bool_]) -> bool:
    """Fill slots with one piece each at the least sum of costs; False where there are too few pieces.

    Parameters
    ----------
    costs
        Shape ``(n_slots, n_values of the kind)``.
    which
        Values of the kind, shape ``(n_values,)``.
    """
    from scipy.optimize import linear_sum_assignment

    places = np.flatnonzero(which)
    copies = np.minimum(state.left(shelf)[places], len(slots))
    if copies.sum() < len(slots):
        return False
    if len(slots) and copies.min() == len(slots):
        chosen = np.argmin(costs, axis=1)
    else:
        columns = np.repeat(np.arange(len(places)), copies)
        chosen = columns[linear_sum_assignment(costs[:, columns])[1]]
    for slot, choice in zip(slots, chosen.tolist(), strict=True):
        state.put(slot, float(np.log(shelf.value[places[choice]])), (int(places[choice]),))
    return True


def t_options(shelf: Shelf, wanted: float) -> list[tuple[float, tuple[int, ...]]]:
    """Networks of three near a wanted log of the transfer resistance, as log and positions of the values."""
    values = tuple(shelf.value[~shelf.capacitive].tolist())
    place = {value: i for i, value in enumerate(values)}
    made = [(log(Leg(parts).transfer), tuple(place[r] for r in parts)) for parts in networks(values)]
    near = [
        option
        for option in made
        if abs(option[0] - wanted) < WIDTH and all(option[1].count(v) <= shelf.count[v] for v in option[1])
    ]
    return sorted(near, key=lambda option: (abs(option[0] - wanted), option[1]))[:MOST_TS]


def pair_options(shelf: Shelf, wanted: float) -> list[tuple[float, tuple[int, ...]]]:
    """Single resistors and pairs in series or parallel near a wanted log, as log and positions of the values."""
    places = np.flatnonzero(~shelf.capacitive & (shelf.count > 0))
    first, second = (places[i] for i in np.triu_indices(len(places)))
    kept = (first != second) | (shelf.count[first] > 1)
    one, other = shelf.value[first[kept]], shelf.value[second[kept]]
    both = list(zip(first[kept].tolist(), second[kept].tolist(), strict=True))
    made: list[tuple[float, tuple[int, ...]]] = [(log(shelf.value[i]), (int(i),)) for i in places]
    made += zip(np.log(one + other).tolist(), both, strict=True)
    made += zip(np.log(one * other / (one + other)).tolist(), both, strict=True)
    near = [option for option in made if abs(option[0] - wanted) < WIDTH]
    return sorted(near, key=lambda option: (abs(option[0] - wanted), option[1]))[:MOST_TS]


def menu_of(
    shelf: Shelf,
    slots: Sequence[int],
    centre: Array,
    capacitive: NDArray[np.bool_],
    ts: Mapping[int, Sequence[tuple[float, tuple[int, ...]]]],
) -> Menu:
    """Moves of the slots to values near ``centre``, shape ``(n_slots,)``; T legs for those of ``ts``."""
    logs = np.log(shelf.value)
    moves: list[tuple[int, float, tuple[int, ...]]] = []
    for slot in slots:
        if slot in ts:
            moves += [(slot, value, parts) for value, parts in ts[slot]]
            continue
        places = np.flatnonzero(shelf.capacitive == capacitive[slot])
        away = np.abs(logs[places] - centre[slot])
        order = np.argsort(away, kind="stable")
        near = order[: max(LEAST_MENU, int(np.count_nonzero(away <= WIDTH)))]
        moves += [(slot, float(logs[place]), (int(place),)) for place in places[near]]
    holds = np.array([np.bincount(m[2], minlength=len(logs)) for m in moves], dtype=np.int64)
    return Menu(
        np.array([m[0] for m in moves], dtype=np.intp), np.array([m[1] for m in moves]),
        tuple(m[2] for m in moves), holds.reshape(len(moves), len(logs)),
    )  # fmt: skip


def descend_counted(state: State, menu: Menu, effect: Array, errors: Callable[[Array], Array], shelf: Shelf) -> None:
    """Descend, in place, on the squared loop errors over single and paired moves that the shelf allows.

    A pair may exchange the pieces of two slots.

    Parameters
    ----------
    effect
        Loop errors per log of each slot, shape ``(n_loops, n_slots)``.
    errors
        Loop errors of logs ``y``.
    """
    for _ in range(MOST_MOVES if effect.size and menu.value.size else 0):
        change = effect[:, menu.slot] * (menu.value - state.y[menu.slot])
        single = 2.0 * (errors(state.y) @ change) + np.einsum("lk,lk->k", change, change)
        need = menu.holds - state.holds[menu.slot]
        left = state.left(shelf)
        fits: NDArray[np.bool_] = np.all(need <= left, axis=1)
        moves = _best(single, change, need, left, fits, menu)
        if not moves:
            break
        for move in moves:
            state.put(int(menu.slot[move]), float(menu.value[move]), menu.parts[move])


def _best(
    single: Array, change: Array, need: Counts, left: Counts, fits: NDArray[np.bool_], menu: Menu
) -> tuple[int, ...]:
    """The move or pair of moves that betters most; () where none does."""
    alone = int(np.argmin(np.where(fits, single, np.inf)))
    least = single[alone] if fits[alone] else 0.0
    order = np.argsort(single, kind="stable")
    likely = np.unique(np.concatenate((order[:MOST_PAIRED], order[fits[order]][: MOST_PAIRED // 2])))
    paired = single[likely][:, None] + single[likely][None, :] + 2.0 * (change[:, likely].T @ change[:, likely])
    paired[menu.slot[likely][:, None] >= menu.slot[likely][None, :]] = np.inf
    better = np.flatnonzero(paired.ravel() < min(least, 0.0) - LEAST_GAIN)
    better = better[np.argsort(paired.ravel()[better], kind="stable")][:MOST_LOOKS]
    first, second = np.divmod(better, len(likely))
    allowed = np.flatnonzero((need[likely[first]] + need[likely[second]] <= left).all(axis=1))
    if allowed.size:
        return int(likely[first[allowed[0]]]), int(likely[second[allowed[0]]])
    return (alone,) if least < -LEAST_GAIN else ()
