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

#: Cells of the run over which a searched waveform holds one level, and rounds of improvement.
CELLS, ROUNDS = 32, 2


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
    """What the search found: extremes of every name, and the waveforms that drive the first watched signal furthest."""

    low: Array
    high: Array
    stand_ins: dict[str, Stored]


def search_waveforms(system: System, field: Field, peaks: Array) -> Searched:
    """Levels, square and sine waves of many periods, then improvement by trial flips of single cells.

    Raises
    ------
    GrowsWithoutBoundError
        Some waveform inside the bounds makes the solution grow without bound.
    """
    bounds = [s.within for s in system.sources if s.waveform is None and s.within is not None]
    low, high = np.array([[float(a), float(b)] for a, b in bounds]).T
    watched = field.names.index(system.watch[0][0]) if system.watch else 0
    shapes = _first_shapes(len(bounds))
    best, best_size, lows, highs = shapes[..., 0], -1.0, [], []
    for round_ in range(2 * ROUNDS + 1):
        levels = ((low + high)[:, None, None] + (high - low)[:, None, None] * shapes) / 2
        batch = _solve(system, field, levels, peaks)
        ends = batch.extremes()
        lows.append(ends[0].min(axis=1))
        highs.append(ends[1].max(axis=1))
        sizes = np.maximum(np.abs(ends[0][watched]), np.abs(ends[1][watched]))
        winner = int(sizes.argmax())
        if sizes[winner] > best_size:
            best, best_size = shapes[..., winner], float(sizes[winner])
        shapes = _flips(best) if round_ % 2 == 0 else _composed(best, ends)
    levels = ((low + high)[:, None] + (high - low)[:, None] * best) / 2
    return Searched(np.min(lows, axis=0), np.max(highs, axis=0), stored(system, levels))


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


def _solve(system: System, field: Field, levels: Array, peaks: Array) -> Batch:
    inputs = ManyInputs(system, levels)
    weights = np.repeat(field.weights(system.knob_values())[:, None], levels.shape[2], axis=1)
    times = uniform_grid(inputs.edges, 400)
    return solve_batch(system, field, weights, inputs, times, peaks)
