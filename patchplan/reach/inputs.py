"""Sources as numbers: values inside the stretches between jumps."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System

Array = NDArray[np.float64]
Stored = tuple[Array, Array]

#: A stretch is entered by this part of the duration at its ends, so that a jump there is seen from inside.
_INSIDE = 1e-12


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
        self.edges = self._edges()
        self.edge_depth = _INSIDE * self.duration

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

    def values(self, times: Array) -> Array:
        """Every source at the times, shape ``(n_sources, n_times)``."""
        out: Array = np.empty((self.count, times.size))
        for i, source in enumerate(self.sources):
            if source.waveform is not None:
                out[i] = source.waveform.values(times)
            elif source.name in self.stand_ins:
                out[i] = np.interp(times, *self.stand_ins[source.name])
            else:
                low, high = source.within or (0, 0)
                out[i] = (float(low) + float(high)) / 2
        return out

    def at(self, time: float) -> Array:
        """Every source at one time, shape ``(n_sources,)``."""
        return self.values(np.array([time]))[:, 0]

    def column(self, run: int) -> Inputs:
        """The inputs of one of several runs: here all runs have the same."""
        return self

    def inside(self, times: Array, start: float, stop: float) -> Array:
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
