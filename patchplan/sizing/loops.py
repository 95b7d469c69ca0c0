"""Independent loops of the gains: sets of rows whose errors no choice of scale factors can take away.

A loop is a combination of rows in which every scale factor cancels. Most are cycles of the gain graph; one that passes
from one dictated scale to another, such as the reference, is a path. Where the speed is free it takes up one loop's
time constant, and every other loop counts relative to that one.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.model import Model

Array = NDArray[np.float64]
_ZERO = 1e-9


@dataclass(frozen=True)
class Circuits:
    """Loops of a model.

    Attributes
    ----------
    rows
        For each independent loop: row -> its share; shares times rows of A sum to zero.
    paths
        The same loops before they are taken relative to the absorbed one.
    absorbed
        The loop whose time constant a free speed takes up: row -> share; empty where there is none.
    """

    rows: tuple[Mapping[int, float], ...]
    paths: tuple[Mapping[int, float], ...]
    absorbed: Mapping[int, float]

    def dense(self, count: int) -> Array:
        """Shares as a matrix, shape ``(count, n_loops)``."""
        matrix = np.zeros((count, len(self.rows)))
        for loop, shares in enumerate(self.rows):
            matrix[list(shares), loop] = list(shares.values())
        return matrix

    def errors(self, residual: Array) -> Array:
        """Relative error of each loop's gain for residuals r - b of the rows, shape ``(n_loops,)``."""
        return np.array([np.expm1(-sum(v * residual[r] for r, v in shares.items())) for shares in self.rows])


def find_circuits(model: Model) -> Circuits:
    """Independent loops, short ones first, relative to the speed where it is free."""
    clock = set(model.speed.slope)
    rows = [{c: v for c, v in r.want.slope.items() if c not in clock} for r in model.ratios]
    found = _dependent(rows)
    turns = [sum(v for r, v in shares.items() if model.ratios[r].kind == "integrator") for shares in found]
    if not clock or not any(abs(t) > _ZERO for t in turns):
        return Circuits(tuple(found), tuple(found), {})
    # The loop through most integrators tells the time best: errors of the others then count once at most.
    first = max(range(len(found)), key=lambda i: (round(abs(turns[i]), 6), -i))
    others = [i for i in range(len(found)) if i != first]
    relative = [_combined(found[i], found[first], -turns[i] / turns[first]) for i in others]
    return Circuits(tuple(relative), tuple(found[i] for i in others), found[first])


def _dependent(rows: Sequence[Mapping[int, float]]) -> list[dict[int, float]]:
    """Combinations of sparse rows that vanish, one for each row beyond the rank.

    Elimination in the order of :func:`_breadth_first`: a row that reaches a new column stays as it is, so that rows
    stay short and a loop closes along the shortest branches.
    """
    owner: dict[int, tuple[int, Mapping[int, float], Mapping[int, float]]] = {}
    loops = []
    for row, reached in _breadth_first(rows):
        left, shares = dict(rows[row]), {row: 1.0}
        if reached is not None:
            owner[reached] = (len(owner), left, shares)
            continue
        while owned := [c for c in left if c in owner]:
            column = max(owned, key=lambda c: owner[c][0])
            _, other, made = owner[column]
            factor = -left[column] / other[column]
            left, shares = _combined(left, other, factor), _combined(shares, made, factor)
        if left:
            # Below all branches: what the branches leave is eliminated last, oldest first.
            owner[next(iter(left))] = (-len(owner) - 1, left, shares)
        else:
            loops.append(shares)
    return loops


def _breadth_first(rows: Sequence[Mapping[int, float]]) -> list[tuple[int, int | None]]:
    """Rows, those first that add at most one column to the columns reached, with the column that each one reaches."""
    using: dict[int, list[int]] = {}
    for row, slopes in enumerate(rows):
        for column in slopes:
            using.setdefault(column, []).append(row)
    unseen = [len(slopes) for slopes in rows]
    ready = deque(row for row, count in enumerate(unseen) if count <= 1)
    rest = iter(range(len(rows)))
    seen: set[int] = set()
    order: dict[int, int | None] = {}
    while len(order) < len(rows):
        row = ready.popleft() if ready else next(rest)
        if row in order:
            continue
        fresh = [c for c in rows[row] if c not in seen]
        order[row] = fresh[0] if fresh else None
        for column in fresh:
            seen.add(column)
            for other in using[column]:
                unseen[other] -= 1
                if unseen[other] <= 1:
                    ready.append(other)
    return list(order.items())


def _combined(one: Mapping[int, float], other: Mapping[int, float], factor: float) -> dict[int, float]:
    total = dict(one)
    for key, value in other.items():
        total[key] = total.get(key, 0.0) + factor * value
    return {key: value for key, value in total.items() if abs(value) > _ZERO}
