"""The fewest trimmers, and the readings they are set by: linear algebra on responses of the watched signals."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations, permutations
from math import ceil, comb, log

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
#: Most sets of one size that are all tried.
MOST_SETS = 3000
#: A reading has at least this share of a trimmer's largest effect; readings drawn besides those that part them best.
STRONG, DRAWS = 0.3, 300
#: Sets of readings whose order is sought; points that the best one is bettered at; orders of up to so many trimmers are
#: all tried.
PAIRED, EXCHANGED, MOST_ORDERED = 20, 60, 5
#: Setting all in turn goes on until this share of the first error is left; what takes more rounds is no help.
SETTLED, MOST_ROUNDS = 0.02, 5
#: Rounds of what does not settle at all.
NEVER = 999
#: What a round is worth in logs of spread.
ROUND_WORTH = 2.5
#: Singular values below this share of the largest are none.
RANK = 1e-6


def spread_at(columns: Array) -> float:
    """Largest standard deviation over all points."""
    return float(np.sqrt(np.max(np.sum(columns**2, axis=1), initial=0.0)))


def smallest_set(responses: Array, columns: Array, allowed: float, most: int) -> tuple[list[int], int]:
    """Places of the smallest set found that leaves no more than allowed, and the fewest proved necessary."""
    values = np.linalg.svd(columns, compute_uv=False)
    # No set of k leaves less, in the mean square over the points, than the singular values after the k-th.
    tails = [float(np.sqrt((values[k:] ** 2).sum() / len(columns))) for k in range(len(values) + 1)]
    least = next(k for k, tail in enumerate(tails) if tail <= allowed)
    chosen = _forward(responses, columns, allowed, most)
    for size in range(max(least, 1), len(chosen)):
        if comb(responses.shape[1], size) > MOST_SETS:
            break
        sets = [list(s) for s in combinations(range(responses.shape[1]), size)]
        left = [spread_at(_outside(responses[:, s], columns)) for s in sets]
        best = int(np.argmin(left))
        if left[best] <= allowed:
            return sets[best], least
    return chosen, least


def _outside(responses: Array, columns: Array) -> Array:
    """The part of columns outside the span of responses."""
    q, r = np.linalg.qr(responses)
    size = np.abs(np.diag(r))
    q = q[:, size > RANK * size.max(initial=0.0)]
    rest: Array = columns - q @ (q.T @ columns)
    return rest


def _forward(responses: Array, columns: Array, allowed: float, most: int) -> list[int]:
    """Places one by one, each the one that leaves least of the columns in the mean square."""
    chosen: list[int] = []
    rest, free = columns, responses.copy()
    scale = np.linalg.norm(responses, axis=0)
    while spread_at(rest) > allowed and len(chosen) < most:
        size = np.linalg.norm(free, axis=0)
        useful = size > 1e-3 * np.maximum(scale, 1e-300)
        if not useful.any():
            break
        taken = ((free.T @ rest / np.maximum(size, 1e-300)[:, None]) ** 2).sum(axis=1)
        chosen.append(int(np.argmax(np.where(useful, taken, -1.0))))
        axis = free[:, chosen[-1]] / size[chosen[-1]]
        rest = rest - np.outer(axis, axis @ rest)
        free = free - np.outer(axis, axis @ free)
    return chosen


def find_readings(responses: Array, columns: Array) -> tuple[list[int], list[int], int]:
    """Setting order, the point that each trimmer is read at, and how many rounds it takes.

    Points are sought that leave least of the columns once all readings stand: where later trimmers move least, by QR
    with pivoting, and drawn at random, the best bettered one by one. Order and pairing with the trimmers are then those
    that settle fastest when set one after the other (Gauss-Seidel).
    """
    tried = sorted(_point_sets(responses), key=lambda points: left_by(responses, columns, points))[:PAIRED]
    found = []
    for points in tried:
        order, paired = _paired(responses, points)
        found.append((_rounds(responses[paired][:, order]), left_by(responses, columns, points), order, paired))
    least = max(min(f[1] for f in found), 1e-12)
    rounds, _, order, paired = min(found, key=lambda f: f[0] + ROUND_WORTH * log(max(f[1], 1e-12) / least))
    return order, _bettered(responses[:, order], columns, paired, rounds), rounds


def left_by(responses: Array, columns: Array, points: Sequence[int]) -> float:
    """Spread that is left once the readings at some points stand where they should."""
    return spread_at(columns - responses @ moves_for(responses, columns, points))


def _point_sets(responses: Array) -> list[list[int]]:
    from scipy.linalg import qr

    count, sizes = responses.shape[1], np.abs(responses)
    strong = [np.flatnonzero(sizes[:, t] >= STRONG * sizes[:, t].max()) for t in range(count)]
    points, free = [], list(range(count))
    while free:
        others = sizes[:, free].sum(axis=1)
        _, trimmer, point = max(
            (sizes[p, t] / (others[p] - sizes[p, t] + 0.02 * sizes[:, t].max()), -t, -int(p))
            for t in free
            for p in strong[t]
        )
        points.append(-point)
        free.remove(-trimmer)
    random = np.random.default_rng(1)
    drawn = [[int(random.choice(strong[t])) for t in range(count)] for _ in range(DRAWS)]
    return [points, qr(responses.T, pivoting=True, mode="economic")[2][:count].tolist(), *drawn]


def _bettered(responses: Array, columns: Array, points: Sequence[int], rounds: int) -> list[int]:
    """Points moved one by one to where less is left, in no more rounds; trimmers and points in setting order."""
    best, points = left_by(responses, columns, points), list(points)
    grid = range(0, len(responses), max(1, len(responses) // EXCHANGED))
    for slot in range(len(points)):
        for point in grid:
            trial = [*points[:slot], point, *points[slot + 1 :]]
            left = left_by(responses, columns, trial)
            if left < best and _rounds(responses[trial]) <= rounds:
                best, points = left, trial
    return points


def _paired(responses: Array, points: Sequence[int]) -> tuple[list[int], list[int]]:
    """Setting order of the trimmers, and their points in that order."""
    from scipy.optimize import linear_sum_assignment

    seen = responses[list(points)]
    rows, own = linear_sum_assignment(-np.log(np.abs(seen) / np.abs(seen).max() + 1e-9))
    count = len(points)
    orders = [tuple(range(count))]
    if count <= MOST_ORDERED:
        orders = list(permutations(range(count)))
    best = min(orders, key=lambda o: _radius(seen[rows[list(o)]][:, own[list(o)]]))
    return [int(own[i]) for i in best], [int(points[rows[i]]) for i in best]


def _radius(seen: Array) -> float:
    """What is left of an error after one round of setting one after the other, as a factor."""
    if np.abs(np.diag(seen)).min() <= 1e-9 * np.abs(seen).max():
        return np.inf
    return float(np.abs(np.linalg.eigvals(np.linalg.solve(np.tril(seen), np.triu(seen, 1)))).max())


def _rounds(seen: Array) -> int:
    """Rounds of setting one after the other until the readings stand, from their matrix in setting order."""
    radius = _radius(seen)
    if radius >= 1.0:
        return NEVER
    return 1 if radius < SETTLED else 1 + ceil(log(SETTLED) / log(radius))


def moves_for(responses: Array, columns: Array, points: Sequence[int]) -> Array:
    """Relative changes of the trimmed resistors that the readings take for the columns, ``(n_trimmers, n_columns)``."""
    return np.asarray(np.linalg.lstsq(responses[list(points)], columns[list(points)], rcond=None)[0])
