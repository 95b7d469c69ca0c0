"""Nonlinear equations whose inputs are known only by bounds: a search for the worst waveforms, never a proof."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.reach.field import Field
from patchplan.reach.inputs import Inputs, Stored
from patchplan.reach.nominal import uniform_grid
from patchplan.reach.points import SEED
from patchplan.reach.search import Batch, solve_batch

Array = NDArray[np.float64]

#: Cells of the run over which a searched waveform holds one level, most rounds of improvement, and the gain below which
#: they end.
CELLS, ROUNDS, _GAIN = 32, 6, 1e-4
#: Watched signals for which waveforms are searched.
MOST_TARGETS = 4


class ManyInputs(Inputs):
    """Inputs of several runs at once: free inputs hold one level in each cell, different in each run.

    Parameters
    ----------
    levels
        Shape ``(n_free, CELLS, m)``, of the free inputs in the order of the System.
    """

    def __init__(self, system: System, levels: Array) -> None:
        self.levels = levels
        self.free = [i for i, s in enumerate(system.sources) if s.waveform is None]
        super().__init__(system)
        self.system = system
        cells = np.linspace(0.0, self.duration, levels.shape[1] + 1)
        known = self.edges
        near = np.abs(cells[:, None] - known).min(axis=1) < 1e-9 * self.duration
        self.edges = self.restarts = np.sort(np.concatenate((known, cells[~near])))

    def at(self, time: float) -> Array:
        """Every source in every run at one time, shape ``(n_sources, m)``."""
        cell = min(int(time / self.duration * self.levels.shape[1]), self.levels.shape[1] - 1)
        values = np.repeat(super().at(time)[:, None], self.levels.shape[2], axis=1)
        values[self.free] = self.levels[:, cell]
        return values

    def column(self, run: int) -> Inputs:
        """The inputs of one run."""
        inputs = Inputs(self.system, stored(self.system, self.levels[..., run]))
        inputs.edges = self.edges
        return inputs


def stored(system: System, levels: Array) -> dict[str, Stored]:
    """Stand-in waveforms by name from levels of shape ``(n_free, n_cells)``; only real jumps are kept."""
    names = [s.name for s in system.sources if s.waveform is None]
    edges = np.linspace(0.0, float(system.duration), levels.shape[1] + 1)
    found = {}
    for name, row in zip(names, levels, strict=True):
        turns = np.flatnonzero(np.diff(row)) + 1
        times = np.concatenate(([0.0], np.repeat(edges[turns], 2), edges[-1:]))
        found[name] = times, np.repeat(row[np.append(0, turns)], 2)
    return found


@dataclass(frozen=True)
class Searched:
    """What the search found: extremes of every name, and of each target the waveforms that drive it furthest."""

    low: Array
    high: Array
    stand_ins: tuple[dict[str, Stored], ...]


def targets_of(system: System, field: Field) -> list[int]:
    """Places of the watched signals for which waveforms are searched."""
    free = {s.name for s in system.sources if s.waveform is None}
    places = [field.names.index(name) for name, _ in system.watch if name not in free]
    return (places or [0])[:MOST_TARGETS]


def search_waveforms(system: System, field: Field, weights: Array, peaks: Array) -> Searched:
    """Levels, square and sine waves of many periods, then improvement by trial flips of single cells for each target.

    Parameters
    ----------
    weights
        Shape ``(n_terms,)``.

    Raises
    ------
    GrowsWithoutBoundError
        Some waveform inside the bounds makes the solution grow without bound.
    """
    bounds = [s.within for s in system.sources if s.waveform is None and s.within is not None]
    low, high = np.array([[float(a), float(b)] for a, b in bounds]).T
    lows, highs, stand_ins = [], [], []

    def ends_under(shapes: Array) -> tuple[Array, Array]:
        levels = ((low + high)[:, None, None] + (high - low)[:, None, None] * shapes) / 2
        ends = _solve(system, field, weights, levels, peaks).extremes()
        lows.append(ends[0].min(axis=1))
        highs.append(ends[1].max(axis=1))
        return ends

    first = _first_shapes(len(bounds))
    begun = ends_under(first)
    for target in targets_of(system, field):
        sizes = np.maximum(np.abs(begun[0][target]), np.abs(begun[1][target]))
        best, size = first[..., sizes.argmax()], float(sizes.max())
        for _ in range(ROUNDS):
            flips = _flips(best)
            ends = ends_under(flips)
            gains = np.maximum(np.abs(ends[0][target]), np.abs(ends[1][target]))[1:] - size
            shapes = np.concatenate((_composed(best, ends), _prefixes(best, gains)), axis=2)
            made = ends_under(shapes)
            sizes = np.maximum(np.abs(made[0][target]), np.abs(made[1][target]))
            if sizes.max() <= size * (1 + _GAIN):
                break
            best, size = shapes[..., sizes.argmax()], float(sizes.max())
        stand_ins.append(stored(system, ((low + high)[:, None] + (high - low)[:, None] * best) / 2))
    return Searched(np.min(lows, axis=0), np.max(highs, axis=0), tuple(stand_ins))


def _first_shapes(count: int) -> Array:
    """Shapes in -1 ... 1 to begin with, ``(count, CELLS, m)``: all inputs alike, then mixed by chance."""
    cells = np.arange(CELLS) + 0.5
    rows = [np.full(CELLS, 1.0), np.full(CELLS, -1.0), np.zeros(CELLS)]
    for period in (2, 4, 6, 8, 12, 16, 24, 32, 64):
        wave = np.sin(2 * np.pi * cells / period)
        rows += [np.sign(wave), -np.sign(wave), wave]
    alike = np.repeat(np.array(rows).T[None], count, axis=0)
    chance = np.random.default_rng(SEED).choice((-1.0, 1.0), (count, CELLS, 8))
    return np.concatenate((alike, chance), axis=2)


def _flips(best: Array) -> Array:
    """The best shape, then the same with one cell of one input turned over, ``(count, CELLS, 1 + count * CELLS)``."""
    count = best.size
    shapes = np.repeat(best[..., None], count + 1, axis=2).reshape(count, count + 1)
    shapes[np.arange(count), np.arange(count) + 1] = np.where(best.ravel() > 0, -1.0, 1.0)
    return shapes.reshape(*best.shape, count + 1)


def _composed(best: Array, ends: tuple[Array, Array]) -> Array:
    """For each name and each end, all flips at once that moved that end outwards."""
    low, high = ends
    outwards = np.concatenate((low[:, 1:] < low[:, :1], high[:, 1:] > high[:, :1]))
    flat = best.ravel()
    turned = np.where(flat > 0, -1.0, 1.0)
    shapes = np.unique(np.where(outwards, turned, flat), axis=0)[:64]
    return shapes.T.reshape(*best.shape, -1)


def _prefixes(best: Array, gains: Array) -> Array:
    """The flips that gain, the best 1, 2, 3, 4, 6, 8 ... of them at once; ``gains`` of shape ``(best.size,)``."""
    order = np.argsort(-gains, kind="stable")[: max(1, int((gains > 0).sum()))]
    shapes = []
    for count in (1, 2, 3, 4, 6, 8, 12, 16, 24, 32):
        flat = best.ravel().copy()
        flat[order[:count]] = np.where(flat[order[:count]] > 0, -1.0, 1.0)
        shapes.append(flat.reshape(best.shape))
    return np.stack(shapes, axis=2)


def _solve(system: System, field: Field, weights: Array, levels: Array, peaks: Array) -> Batch:
    inputs = ManyInputs(system, levels)
    times = uniform_grid(inputs.edges, 400)
    return solve_batch(system, field, np.repeat(weights[:, None], levels.shape[2], axis=1), inputs, times, peaks)
