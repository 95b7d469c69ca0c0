"""Two resistors where one does not do: which legs get them, and what two resistors make."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.networks import FINE
from patchplan.sizing.values import Choice, all_legs, plain

Array = NDArray[np.float64]


@lru_cache(maxsize=8)
def legs_with_pairs(resistors: tuple[float, ...], networks: bool) -> Choice:
    """Every single resistor and every pair between the smallest and twice the largest; above, networks of three.

    A single one stays before an equal pair.
    """
    single = all_legs(resistors, FINE) if networks else plain(resistors)
    values = np.array(resistors)
    first, second = (values[i] for i in np.triu_indices(len(values)))
    found = {round(x, 9): (single.parts[k], "") for k, x in enumerate(single.logs.tolist())}
    for join, made in (("series", first + second), ("parallel", first * second / (first + second))):
        for one, other, x in zip(first.tolist(), second.tolist(), np.log(made).tolist(), strict=True):
            if x >= single.logs[0]:
                found.setdefault(round(x, 9), ((one, other), join))
    rising = sorted(found)
    return Choice(np.array(rising), tuple(found[x][0] for x in rising), tuple(found[x][1] for x in rising))


def legs_to_pair(errors: Array, loops: Array, free: Sequence[int], legs: Sequence[int], goal: float) -> list[int]:
    """Fewest legs, found one by one, that could take up all loop errors above a goal if they had any value.

    Orthogonal matching pursuit (Pati, Rezaiifar and Krishnaprasad 1993, Asilomar Conference): each time the leg that
    leaves least when all those chosen are set together.

    Parameters
    ----------
    errors
        Of the loops, shape ``(n_loops,)``.
    loops
        What a unit of each unknown does to the loops, shape ``(n_unknowns, n_loops)``.
    free
        Unknowns that have any value for nothing, as networks of three do; first in what is returned.
    legs
        Unknowns that may be paired.
    """
    chosen = list(free)
    left = _left(errors, loops[chosen]) if chosen else errors
    while np.abs(left).max(initial=0.0) > goal and len(chosen) < len(free) + len(legs):
        trials = [(leg, _left(errors, loops[[*chosen, leg]])) for leg in legs if leg not in chosen]
        leg, left = min(trials, key=lambda trial: float((trial[1] ** 4).sum()))
        chosen.append(leg)
    return chosen


def _left(errors: Array, columns: Array) -> Array:
    taken: Array = columns.T @ np.linalg.lstsq(columns.T, errors, rcond=None)[0]
    return errors - taken
