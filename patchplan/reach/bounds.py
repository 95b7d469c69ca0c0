"""Worst case of linear equations under inputs known only by bounds: peak gains over the run of any sum of signals."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.reach.areas import areas, cells_of
from patchplan.reach.curves import linear_error
from patchplan.reach.field import Bound
from patchplan.reach.inputs import Inputs
from patchplan.reach.linear import solve_linear
from patchplan.reach.nominal import linear_parts, solve_nominal
from patchplan.reach.records import Bounded, Response, Run
from patchplan.reach.solve import GrowsWithoutBoundError
from patchplan.reach.truncation import missed

Array = NDArray[np.float64]
Index = NDArray[np.intp]

#: Tolerance of impulse responses; what it leaves is bounded afterwards and added.
_TOLERANCE = 1e-11
#: The same where nothing is to be proved.
_UNPROVED = 1e-9
#: Where no bound of an impulse response's own error was found: this part of the area is added instead.
_ESTIMATE = 1e-7
#: Numbers worked on at a time.
_BLOCK = 2_000_000
#: Parts into which a cell that may hold the highest point is divided, how often, how many cells at most, and how close
#: is close enough.
_PARTS, _ROUNDS, _MOST_CELLS, _CLOSE = 8, 8, 20_000, 1e-9


@dataclass(frozen=True)
class Ends:
    """Lowest and highest value of each row that any waveform within the bounds can make, and when, ``(n_rows,)``."""

    low: Array
    high: Array
    low_at: Array
    high_at: Array
    proved: bool


def free_sources(system: System) -> list[tuple[str, float, float]]:
    """Name, middle and half width of every input known only by its bounds."""
    found = []
    for s in system.sources:
        if s.waveform is None and s.within is not None:
            low, high = (float(x) for x in s.within)
            found.append((s.name, (low + high) / 2, (high - low) / 2))
    return found


def bounded_of(system: System, field: Bound, knobs: Mapping[str, float], *, proof: bool = True) -> Bounded:
    """What proves the ranges of a linear System at one setting of its knobs.

    Parameters
    ----------
    proof
        False where the error of the impulse responses need only be estimated: over a box nothing is proved anyway, and
        the bound takes as long as all the rest.

    Raises
    ------
    GrowsWithoutBoundError
        With the time.
    """
    from scipy.sparse import csr_array, hstack

    matrix, by_source, constant = linear_parts(field)
    names = [s.name for s in system.sources]
    responses = []
    for name, middle, half in free_sources(system):
        place = names.index(name)
        column = by_source[:, [place]].toarray()[:, 0]
        responses.append(_response(matrix, column, float(system.duration), name, place, middle, half, proof))
    slopes = hstack((csr_array(constant[:, None]), matrix, by_source)).tocsr()
    run = Run(knobs, *solve_nominal(system, field, Inputs(system)))
    return Bounded(field.field.names, name_rows(field), slopes, run, tuple(responses))


def _response(
    matrix: Any, column: Array, duration: float, name: str, place: int, middle: float, half: float, proof: bool
) -> Response:
    try:
        pieces = solve_linear(
            matrix, column, None, np.array([0.0, duration]), tolerance=_TOLERANCE if proof else _UNPROVED
        )
    except FloatingPointError as error:
        raise GrowsWithoutBoundError(float(error.args[0])) from None
    off = np.zeros(column.size) if not column.any() else missed(matrix, pieces, duration) if proof else None
    if off is not None:
        return Response(name, place, middle, half, pieces, off, True)
    size = np.abs(pieces.points).max(axis=1)
    return Response(name, place, middle, half, pieces, _ESTIMATE * (pieces.lengths @ size), False)


def name_rows(field: Bound) -> Any:
    """Every name as a sum of 1, the states and the sources: sparse, shape ``(n_names, 1 + n_states + n_sources)``."""
    from scipy.sparse import csr_array, eye_array, hstack, vstack

    n, m = field.field.n_states, field.field.n_sources
    zero = np.zeros(n), np.zeros(m)
    constant = csr_array(field.all_values(*zero)[n + m :, None])
    signals = hstack((constant, field.derivatives(*zero)[1]))
    return vstack((hstack((csr_array((n + m, 1)), eye_array(n + m))), signals)).tocsr()


@dataclass(frozen=True)
class Gains:
    """What inputs known only by their bounds can add to each row, up to each time.

    Attributes
    ----------
    values
        Half width times peak gain, shape ``(n_rows, n_times)``: an upper bound, 1e-8 above the truth or so.
    rates
        Its slope: half width times the magnitude of the impulse response.
    kinked
        Whether the slope may have a corner between one time and the next, shape ``(n_rows, n_times - 1)``.
    """

    values: Array
    rates: Array
    kinked: NDArray[np.bool_]


def gains_of(responses: Sequence[Response], rows: Any, times: Array) -> Gains:
    """Peak gains of each row from 0 to each time.

    The peak gain is the L1 norm of the impulse response: Boyd & Barratt 1991, Linear Controller Design, chapter 5.

    Parameters
    ----------
    rows
        Sparse, shape ``(n_rows, 1 + n_states + n_sources)``.
    times
        Rising, without equal ones, from 0 on.
    """
    values, rates = np.zeros((2, rows.shape[0], times.size))
    kinked = np.zeros((rows.shape[0], times.size - 1), bool)
    for response in responses:
        pieces, n = response.pieces, len(response.missed)
        edges = np.unique(np.concatenate((pieces.starts, times)))
        cells = cells_of(pieces, edges[:-1], edges[1:])
        by_state, lengths = rows[:, 1 : 1 + n].tocsr(), np.diff(edges)
        first_cell = np.searchsorted(edges, times[:-1])
        turned = np.ascontiguousarray(np.moveaxis(cells, 2, 0)).reshape(n, -1)
        step = max(1, _BLOCK // max(1, turned.shape[1]))
        for first in range(0, rows.shape[0], step):
            part = slice(first, first + step)
            block = (by_state[part] @ turned).reshape(-1, lengths.size, cells.shape[1])
            owner = np.repeat(np.arange(len(block)), lengths.size)
            upper = areas(block.reshape(-1, cells.shape[1]), np.tile(lengths, len(block)), owner)[0]
            sums = np.add.reduceat(upper.reshape(len(block), -1), first_cell, axis=1)
            values[part, 1:] += response.half * np.cumsum(sums, axis=1)
            ends = np.concatenate((block[:, first_cell, 0], block[:, -1:, -1]), axis=1)
            rates[part] += response.half * np.abs(ends)
            mixed = (block.min(axis=2) < 0) & (block.max(axis=2) > 0)
            kinked[part] |= np.logical_or.reduceat(mixed, first_cell, axis=1)
        direct = abs(rows[:, [1 + n + response.place]]).toarray()
        values += response.half * (direct + (abs(by_state) @ response.missed)[:, None])
    return Gains(values, rates, kinked)


def ends_of(bounded: Bounded, rows: Any) -> Ends:
    """Ends of every row, a sum of 1, states and sources, under all waveforms within the bounds.

    At each time the run with the inputs at their middle may be left by half width times the peak gain up to then; the
    furthest over the run counts. Cells of the run that may hold it are divided until the ends are known to 1e-9.

    Parameters
    ----------
    rows
        Sparse, shape ``(n_rows, 1 + n_states + n_sources)``.
    """
    run, given = bounded.middle, rows.shape[1] - 1
    values = rows @ np.concatenate((np.ones((1, run.times.size)), run.values[:given]))
    rates = rows[:, 1:] @ run.rates[:given]
    grid, place = np.unique(run.times, return_inverse=True)
    gains = gains_of(bounded.responses, rows, grid)
    # The error of a cubic is about a sixth of the square of the chord's.
    rough = max(1e-9, float(linear_error(run.times, values, rates).max(initial=0.0)) ** 2)
    slack = np.where(np.ptp(values, axis=1) > 0, rough * np.abs(values).max(axis=1), 0.0)
    high, high_at = _Climb(bounded, rows, (values, rates), gains, place).top()
    low, low_at = _Climb(bounded, rows, (-values, -rates), gains, place).top()
    return Ends(-low - slack, high + slack, low_at, high_at, all(r.proved for r in bounded.responses))


def _cell_bounds(
    h: Array, values: Array, rates: Array, gains: Array, speeds: Array, kinked: NDArray[np.bool_]
) -> Array:
    """Bound of (run + gain) over each cell, from the ends of cells along the last axis.

    A cubic lies below its four Bernstein coefficients. Where the gain may have a corner, it counts at its largest.
    """
    smooth = _control(h, values + gains, rates + speeds)
    corner = _control(h, values, rates) + gains[..., 1:]
    return np.where(kinked, corner, smooth)


def _control(h: Array, values: Array, rates: Array) -> Array:
    a, b = values[..., :-1], values[..., 1:]
    inner = np.maximum(a + rates[..., :-1] * h / 3, b - rates[..., 1:] * h / 3)
    out: Array = np.maximum(np.maximum(a, b), inner)
    return out


class _Climb:
    """The highest point of (middle run + what the inputs add) for each row."""

    def __init__(self, bounded: Bounded, rows: Any, curves: tuple[Array, Array], gains: Gains, place: Index) -> None:
        self.bounded, self.rows = bounded, rows
        values, rates = curves
        around, speeds = gains.values[:, place], gains.rates[:, place]
        total = values + around
        best = total.argmax(axis=1)
        self.best = total[np.arange(len(total)), best]
        self.at = bounded.middle.times[best]
        self.close = _CLOSE * (np.abs(values).max(axis=1) + around[:, -1])
        self.dropped = self.best.copy()
        h = np.diff(bounded.middle.times)
        kinked = gains.kinked[:, np.minimum(place[:-1], gains.kinked.shape[1] - 1)]
        bound = _cell_bounds(h, values, rates, around, speeds, kinked)
        row, cell = np.nonzero((bound > self.best[:, None]) & (h > 0))
        ends = np.stack((cell, cell + 1), axis=1)
        # Of each cell that is left: its row, bound, and time, value, rate and gain at both ends.
        self.row, self.bound, self.times = row, bound[row, cell], bounded.middle.times[ends]
        self.values, self.rates, self.around = (x[row[:, None], ends] for x in (values, rates, around))

    def top(self) -> tuple[Array, Array]:
        """Height and time of the highest point, each of shape ``(n_rows,)``; the height never too low."""
        for round_ in range(_ROUNDS + 1):
            left = self.bound > self.best[self.row] + self.close[self.row]
            if round_ == _ROUNDS or left.sum() > _MOST_CELLS:
                left[:] = False
            np.maximum.at(self.dropped, self.row[~left], self.bound[~left])
            kept = np.flatnonzero(left)
            if not kept.size:
                break
            self._divide(kept)
        return np.maximum(self.best, self.dropped), self.at

    def _divide(self, kept: Index) -> None:
        times, values, rates = (x[kept] for x in (self.times, self.values, self.rates))
        h = np.diff(times)
        s = np.linspace(0.0, 1.0, _PARTS + 1)
        a, b, p, q = values[:, :1], values[:, 1:], rates[:, :1] * h, rates[:, 1:] * h
        c2, c3 = 3 * (b - a) - 2 * p - q, p + q - 2 * (b - a)
        fine, slopes = a + s * (p + s * (c2 + s * c3)), (p + s * (2 * c2 + 3 * s * c3)) / h
        when, row = times[:, :1] + s * h, self.row[kept]
        added, speeds, kinked = self._added(row, when)
        around = self.around[kept, :1] + np.pad(np.cumsum(added, axis=1), ((0, 0), (1, 0)))
        total = fine + around
        place = total.argmax(axis=1)
        peaks = total[np.arange(len(kept)), place]
        for i in np.argsort(peaks, kind="stable").tolist():
            if peaks[i] > self.best[row[i]]:
                self.best[row[i]], self.at[row[i]] = peaks[i], when[i, place[i]]
        bound = _cell_bounds(np.diff(when), fine, slopes, around, speeds, kinked)
        self.row, self.bound = np.repeat(row, _PARTS), bound.ravel()
        self.times, self.values, self.rates, self.around = (
            np.stack((x[:, :-1].ravel(), x[:, 1:].ravel()), axis=1) for x in (when, fine, slopes, around)
        )

    def _added(self, row: Index, when: Array) -> tuple[Array, Array, NDArray[np.bool_]]:
        """What the inputs can add over each part of each cell, how fast at its ends, and where that has corners."""
        added = np.zeros((len(row), _PARTS))
        speeds, kinked = np.zeros(when.shape), np.zeros(added.shape, bool)
        for response in self.bounded.responses:
            n = len(response.missed)
            step = max(1, _BLOCK // (_PARTS * 8 * max(1, n)))
            for first in range(0, len(row), step):
                part = slice(first, first + step)
                weights = response.half * self.rows[row[part], 1 : 1 + n].toarray()
                upper, mixed = _parts_of(response, weights, when[part])
                added[part] += upper
                kinked[part] |= mixed
                at = response.pieces.at(when[part].ravel()).reshape(n, -1, when.shape[1])
                speeds[part] += np.abs(np.einsum("nkt,kn->kt", at, weights))
        return added, speeds, kinked


def _parts_of(response: Response, weights: Array, when: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Areas of one row of weights over the parts between its own times, and where it may change its sign."""
    pieces = response.pieces
    starts, ends = when[:, :-1].ravel(), when[:, 1:].ravel()
    first = np.searchsorted(pieces.starts, starts, side="right") - 1
    last = np.maximum(np.searchsorted(pieces.starts, ends, side="left") - 1, first)
    # A part may reach over ends of steps.
    count = last - first + 1
    owner = np.repeat(np.arange(starts.size), count)
    step = first[owner] + np.arange(owner.size) - np.repeat(np.cumsum(count) - count, count)
    begin = np.maximum(starts[owner], pieces.starts[step])
    end = np.maximum(np.minimum(ends[owner], pieces.starts[step] + pieces.lengths[step]), begin)
    curves = np.einsum("kjn,kn->kj", cells_of(pieces, begin, end), weights[owner // (when.shape[1] - 1)])
    upper = areas(curves, end - begin, owner)[0]
    mixed = (curves.min(axis=1) < 0) & (curves.max(axis=1) > 0)
    shape = len(when), when.shape[1] - 1
    summed = np.bincount(owner, upper, starts.size).reshape(shape)
    return summed, np.bincount(owner, mixed, starts.size).reshape(shape) > 0
