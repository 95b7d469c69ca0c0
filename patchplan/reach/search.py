"""Ranges by simulation: the corners and a sample of the adjustable box, boards within tolerance, free waveforms."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.problem import Build
from patchplan.equation.system import System
from patchplan.reach.batch import march
from patchplan.reach.curves import extremes
from patchplan.reach.field import DENSE_LIMIT, Bound, Field
from patchplan.reach.followed import Followed
from patchplan.reach.inputs import Inputs
from patchplan.reach.nominal import LEAST_POINTS, linear_pieces, start_of, tabulate, uniform_grid
from patchplan.reach.points import (
    SEED,
    climb_points,
    effort_for,
    first_points,
    knobs_at,
    most_worst,
    parameters_at,
    steep_corners,
)
from patchplan.reach.records import Box, Run, WorstPoint
from patchplan.reach.solve import GrowsWithoutBoundError, floors, solve

Array = NDArray[np.float64]

#: Boards of the ensemble.
BOARDS = 16
#: Runs over the box are all kept for the nodes of the patch up to this many numbers, and so many of the worst at least.
KEPT_NUMBERS, KEPT = 5_000_000, 24
#: Tolerance of these runs: far below the margins they serve.
_TOLERANCE = 1e-5


@dataclass(frozen=True)
class Batch:
    """Runs solved together: extremes of every name, shape ``(n_names, m)``, and the runs themselves.

    Attributes
    ----------
    values, rates
        Shape ``(n_names, m, n_times)``.
    """

    times: Array
    values: Array
    rates: Array

    def extremes(self) -> tuple[Array, Array]:
        """Lowest and highest value, each of shape ``(n_names, m)``."""
        return extremes(self.times, self.values, self.rates)

    def run(self, column: int, knobs: Mapping[str, float]) -> Run:
        """One of the runs as a record."""
        # A copy, so that the run does not hold the whole batch.
        return Run(knobs, self.times, self.values[:, column].copy(), self.rates[:, column].copy())


def solve_batch(system: System, field: Field, weights: Array, inputs: Inputs, times: Array, peaks: Array) -> Batch:
    """Solve m runs at once, weights of shape ``(n_terms, m)``.

    Raises
    ------
    GrowsWithoutBoundError
        One of the runs does.
    """
    bound = field.bind(weights)
    if system.is_linear and 0 < field.n_states <= DENSE_LIMIT:
        ends = np.unique(times)
        states = np.repeat(march(bound, start_of(system), inputs, ends), 1 + np.isin(ends, inputs.edges[1:-1]), axis=2)
        return _tabulated(bound, inputs, times, states)
    start = np.repeat(start_of(system)[:, None], weights.shape[1], axis=1)
    floor = floors(peaks, 1e-2 * _TOLERANCE)
    if start.size:
        states = solve(bound, start, inputs, times, tolerance=_TOLERANCE, floor=floor)
    else:
        states = np.zeros((0, weights.shape[1], times.size))
    return _tabulated(bound, inputs, times, states)


def _tabulated(bound: Bound, inputs: Inputs, times: Array, states: Array) -> Batch:
    tables = []
    for j in range(states.shape[1]):
        tables.append(tabulate(bound.field.bind(bound.weights[:, j]), inputs.column(j), times, states[:, j]))
    return Batch(times, np.stack([t[0] for t in tables], axis=1), np.stack([t[1] for t in tables], axis=1))


def coarse_grid(system: System, field: Field, inputs: Inputs, times: Array) -> Array:
    """Times for further runs, some hundred at least; edges twice.

    Of the nominal run's times an eighth or more, and 300 evenly spread; for linear equations the nominal steps in equal
    parts, as these have few lengths.
    """
    if system.is_linear and field.n_states:
        pieces = linear_pieces(system, field.bind(field.weights(system.knob_values())), inputs)
        parts = np.full(len(pieces.starts), 1 + LEAST_POINTS // (2 * len(pieces.starts)))
        return pieces.grid(parts, inputs.edges)[0]
    inner = np.unique(
        np.concatenate((times[:: int(np.clip(len(times) // 300, 1, 8))], uniform_grid(inputs.edges, 300)))
    )
    return np.sort(np.concatenate((inner, inputs.edges[1:-1])))


def board_factors(system: System, field: Field, build: Build, *, size: float = 1.0) -> Array:
    """Factors of the coefficients of boards whose parts lie within tolerance, shape ``(n_terms, BOARDS)``.

    Every term has its own resistor, every state its own capacitor; each is off uniformly within its tolerance.
    """
    random = np.random.default_rng(SEED)
    block = field.rate_block
    resistors = random.uniform(-1, 1, (len(field.coefficients), BOARDS)) * build.resistor_tolerance
    capacitors = random.uniform(-1, 1, (field.n_states, BOARDS)) * build.capacitor_tolerance
    factors: Array = 1 + size * resistors
    factors[block.terms] *= 1 + size * capacitors[block.rows]
    exact = [1 + field.names.index(name) for name in system.derived]
    for sums in field.signal_blocks if exact else ():
        factors[sums.terms][np.isin(sums.places[sums.rows], exact)] = 1.0
    return factors


@dataclass(frozen=True)
class Excursion:
    """How far runs go: lowest and highest of each name, ``(n_names,)``; the worst runs; sentences on what failed."""

    low: Array
    high: Array
    runs: tuple[Run, ...] = ()
    warnings: tuple[str, ...] = ()
    box: Box | None = None


def search_box(system: System, field: Field, inputs: Inputs, times: Array, peaks: Array) -> Excursion:
    """Runs over the adjustable box: corners, sample, then climbing from the worst.

    The worst are those where a signal, its slope, a product, a sum under a knob or a knob is lowest or highest. All
    runs are given back, so that every node of the patch can be found over the box; of large systems the worst, then as
    many others as `KEPT_NUMBERS` allows.

    Raises
    ------
    GrowsWithoutBoundError
        A setting of the parameters makes the solution grow without bound.
    """
    random = np.random.default_rng(SEED)
    followed, effort = Followed(field), effort_for(system)
    points = seen = first_points(system)
    tried: list[Mapping[str, float]] = []
    heights = np.zeros((0, 0))
    ends: list[tuple[Array, Array]] = []
    runs: list[Run] = []
    for i in range(effort.rounds + 1):
        knobs = knobs_at(system, points)
        weights = field.weights(knobs)
        where = parameters_at(system, points)
        try:
            batch = solve_batch(system, field, weights, inputs, times, peaks)
        except GrowsWithoutBoundError:
            raise _named(system, field, weights, inputs, times, peaks, where) from None
        ends.append(batch.extremes())
        tried += where
        here = _heights(batch, ends[-1], followed, weights, knobs)
        heights = here if i == 0 else np.hstack((heights, here))
        runs += [
            replace(batch.run(j, {k: float(v[j]) for k, v in knobs.items()}), point=where[j])
            for j in range(len(points))
        ]
        most = max(KEPT, int(KEPT_NUMBERS / batch.values[:, 0].size))
        if len(runs) > most:
            kept = sorted(list(dict.fromkeys([*most_worst(heights).tolist(), *range(len(runs))]))[:most])
            heights, seen, runs = heights[:, kept], seen[kept], [runs[j] for j in kept]
        if i < effort.rounds:
            points = climb_points(seen, heights, effort.climbers, 0.15 / 3**i, random)
            if len(system.adjustable) > effort.corners_up_to:
                points = np.concatenate((points, steep_corners(seen, heights)[: effort.climbers[1]]))
            seen = np.concatenate((seen, points))
    low, high = (np.hstack(e) for e in zip(*ends, strict=True))
    box = box_of(system, field.names, low, high, tried)
    return Excursion(low.min(axis=1), high.max(axis=1), tuple(runs), box=box)


def box_of(system: System, names: Sequence[str], low: Array, high: Array, tried: list[Mapping[str, float]]) -> Box:
    """What was tried, and where each name went furthest; ``low`` and ``high`` of shape ``(n_names, n_runs)``."""
    worst = []
    for i, name in enumerate(names):
        up = high[i].max() >= -low[i].min()
        j = int(high[i].argmax() if up else low[i].argmin())
        worst.append(WorstPoint(name, float((high if up else low)[i, j]), tried[j]))
    effort, count = effort_for(system), len(system.adjustable)
    first, size = len(first_points(system)), effort.sample[count > 1]
    return Box(
        tuple(p.name for p in system.adjustable), first - size, size, len(tried) - first,
        count <= effort.corners_up_to, tuple(worst),
    )  # fmt: skip


def _named(
    system: System, field: Field, weights: Array, inputs: Inputs, times: Array, peaks: Array,
    where: list[Mapping[str, float]],
) -> GrowsWithoutBoundError:  # fmt: skip
    """The first of the runs that grows without bound, alone."""
    for j, point in enumerate(where):
        try:
            solve_batch(system, field, weights[:, [j]], inputs, times, peaks)
        except GrowsWithoutBoundError as error:
            return GrowsWithoutBoundError(error.time, point)
    return GrowsWithoutBoundError(float(times[-1]))


def _heights(
    batch: Batch, ends: tuple[Array, Array], followed: Followed, weights: Array, knobs: Mapping[str, Array]
) -> Array:
    """What the search drives up, shape ``(n_rows, m)``: see `search_box`."""
    curves = [followed.curves(batch.values[:, j], weights[:, j]) for j in range(weights.shape[1])]
    made = np.stack([np.concatenate((c.max(axis=1), -c.min(axis=1))) for c in curves], axis=1)
    settings = [sign * values for values in knobs.values() for sign in (1, -1)]
    return np.vstack((ends[1], -ends[0], made, np.abs(batch.rates).max(axis=2), *settings))


def spread_of_boards(
    system: System, field: Field, build: Build, inputs: Inputs, times: Array, peaks: Array
) -> Excursion:
    """Lowest and highest value of each name over boards with parts within tolerance."""
    nominal = {k.name: float(k.value) for k in system.knobs}
    for size in (1.0, 0.1):
        weights = field.weights(nominal, board_factors(system, field, build, size=size))
        try:
            batch = solve_batch(system, field, weights, inputs, times, peaks)
        except GrowsWithoutBoundError as error:
            time = error.time
            continue
        low, high = batch.extremes()
        said = (
            ()
            if size == 1.0
            else (
                f"With parts at the ends of their tolerance the solution may grow without bound near t = {time:.4g}.",
            )
        )
        return Excursion(low.min(axis=1), high.max(axis=1), warnings=said)
    none = np.zeros(len(field.names))
    return Excursion(
        none + np.inf,
        none - np.inf,
        warnings=(f"With parts slightly off the solution grows without bound near t = {time:.4g}.",),
    )
