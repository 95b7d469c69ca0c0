"""Sources as numbers: values inside the stretches between jumps."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import Source, System
from patchplan.reach.scalar import Scalar, scalar_function

Array = NDArray[np.float64]
Stored = tuple[Array, Array]

#: A stretch is entered by this part of the duration at its ends, so that a jump there is seen from inside.
_INSIDE = 1e-12
#: With more edges than this a solver steps over those where only a slope jumps (rows of a recording).
MANY_EDGES = 100


class Inputs:
    """All sources of a System as functions of time.

    Parameters
    ----------
    system
        The sources and the duration.
    stand_ins
        Waveforms (times, values; two equal times at a jump) for inputs known only by bounds; the middle of the bounds
        where there is none.
    """

    def __init__(self, system: System, stand_ins: Mapping[str, Stored] | None = None) -> None:
        self.duration = float(system.duration)
        self.sources = system.sources
        self.stand_ins = dict(stand_ins or {})
        self.count = len(system.sources)
        self._curves = [self._curve(s) for s in system.sources]
        self._scalars = [_scalar(s, c) for s, c in zip(system.sources, self._curves, strict=True)]
        self.edges = self._edges()
        self.edge_depth = _INSIDE * self.duration
        self.restarts = self._restarts()

    def _edges(self) -> Array:
        """Ends of the stretches without a jump, from 0 to the duration."""
        jumps = [0.0, self.duration]
        for source in self.sources:
            if source.waveform is not None:
                jumps += source.waveform.jumps(self.duration)
            elif source.name in self.stand_ins:
                times = self.stand_ins[source.name][0]
                jumps += list(times[1:][np.diff(times) == 0])
        edges = np.unique(np.clip(np.array(jumps, float), 0.0, self.duration))
        apart = np.append(True, np.diff(edges) > 4 * _INSIDE * self.duration)
        kept: Array = edges[apart]
        kept[-1] = self.duration
        return kept

    def _restarts(self) -> Array:
        """Edges at which a solver starts anew: all, or where there are very many, those where a value jumps."""
        inner = self.edges[1:-1]
        if inner.size <= MANY_EDGES:
            return self.edges
        before, after = self.values(inner - self.edge_depth), self.values(inner + self.edge_depth)
        size = np.ptp(self.values(self.edges), axis=1)[:, None]
        jumping = (np.abs(after - before) > 1e-6 * size).any(axis=0)
        return np.concatenate((self.edges[:1], inner[jumping], self.edges[-1:]))

    def values(self, times: Array) -> Array:
        """Every source at the times, shape ``(n_sources, n_times)``."""
        out: Array = np.empty((self.count, times.size))
        for row, curve in zip(out, self._curves, strict=True):
            row[:] = curve(times)
        return out

    def _curve(self, source: Source) -> Callable[[Array], Array]:
        stored = self.stand_ins.get(source.name)
        if source.waveform is not None and source.waveform.recording is None:
            return source.waveform.values
        if source.waveform is not None and source.waveform.recording is not None:
            recording = source.waveform.recording
            stored = np.asarray(recording.times), np.asarray(recording.values)
        if stored is None:
            low, high = source.within or (0, 0)
            middle = (float(low) + float(high)) / 2
            return lambda t: np.full(t.shape, middle)
        return lambda t: np.interp(t, *stored)

    def at(self, time: float) -> Array:
        """Every source at one time, shape ``(n_sources,)``."""
        return np.array([scalar(time) for scalar in self._scalars])

    def column(self, run: int) -> Inputs:
        """The inputs of one of several runs: here all runs have the same."""
        return self

    def inside(self, times: Array, start: Array | float, stop: Array | float) -> Array:
        """Values at times of one stretch, its ends seen from inside."""
        return self.values(np.clip(times, start + self.edge_depth, stop - self.edge_depth))

    def on_grid(self, times: Array) -> tuple[Array, Array]:
        """Values and rates on a grid in which every jump appears twice (before, after).

        The rates are central differences over a small part of the local spacing, one-sided at the ends of a stretch.
        """
        if not self.count:
            return np.zeros((0, times.size)), np.zeros((0, times.size))
        low, high = self._stretch_of(times)
        low, high = low + self.edge_depth, high - self.edge_depth
        spacing = np.diff(times)
        step = 1e-3 * np.maximum(np.append(spacing, 0.0), np.append(0.0, spacing))
        step = np.maximum(step, 1e-9 * self.duration)
        before, after = np.clip(times - step, low, high), np.clip(times + step, low, high)
        slopes = (self.values(after) - self.values(before)) / np.maximum(after - before, 1e-300)
        return self.values(np.clip(times, low, high)), slopes

    def _stretch_of(self, times: Array) -> tuple[Array, Array]:
        """Start and stop of the stretch of each grid time; the first of two equal times belongs to the earlier one."""
        index = np.searchsorted(self.edges, times, side="right") - 1
        first = np.append(np.diff(times) == 0, False)
        index = np.clip(index - first, 0, len(self.edges) - 2)
        return self.edges[index], self.edges[index + 1]


def _scalar(source: Source, curve: Callable[[Array], Array]) -> Scalar:
    """One source as a function of a single time."""
    tree = source.waveform.tree if source.waveform is not None else None
    if tree is None:
        return lambda t: float(curve(np.array([t]))[0])
    plain = scalar_function(tree)

    def value(t: float) -> float:
        try:
            return plain(t)
        except (ValueError, ArithmeticError):
            return float("nan")

    return value
