"""What drives the board from outside: every source's volts over circuit time, as tables that are quick to read."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.circuit.records import Circuit, Part
from patchplan.equation.waveform import Waveform

Array = NDArray[np.float64]

#: A table is refined until its midpoints agree to this fraction of the peak, or it has this many steps.
_TABLE_ERROR, _MOST_STEPS = 1e-9, 1 << 15
#: A sample at the end of a stretch is taken this fraction inside it, on the right side of a jump.
_INSIDE = 1e-9


@dataclass(frozen=True)
class Drive:
    """The sources of a board.

    Attributes
    ----------
    signals
        The waveform of each source part; None where a table stands for it.
    tables
        (times, values) of recordings and stand-ins in problem time and units, equal times marking a jump; else None.
    scale
        Volts per unit of each source, signed.
    time_scale
        Circuit seconds per unit of problem time.
    jumps
        Times at which a source or its slope jumps or a control line is switched, without those inside a table
        [circuit s].
    """

    signals: tuple[Waveform | None, ...]
    tables: tuple[tuple[Array, Array] | None, ...]
    scale: tuple[float, ...]
    time_scale: float
    jumps: tuple[float, ...]

    @property
    def constant(self) -> bool:
        """Whether there is no source at all."""
        return not self.scale

    def stretch(self, start: float, end: float) -> Stretch:
        """Inputs between two jumps [circuit s]."""
        return Stretch(self, start, end)


@dataclass(frozen=True)
class Stretch:
    """Inputs (sources' volts, then 1) over a stretch of circuit time without jumps."""

    drive: Drive
    start: float
    end: float

    @property
    def constant(self) -> bool:
        """Whether there is no source at all."""
        return self.drive.constant

    @property
    def middle(self) -> float:
        """A time well clear of the jumps [circuit s]."""
        return (self.start + self.end) / 2

    @property
    def knots(self) -> Array:
        """Rows of the tables, where slopes jump [circuit s]."""
        rows = [table[0] * self.drive.time_scale for table in self.drive.tables if table is not None]
        return np.unique(np.concatenate([np.zeros(0), *rows]))

    def over(self, times: Array) -> Array:
        """Inputs at many times, shape ``(n_sources + 1, n_times)``."""
        inside = _INSIDE * (self.end - self.start)
        clipped = np.clip(times, self.start + inside, self.end - inside)
        rows = [self._values(i, clipped) for i in range(len(self.drive.scale))]
        return np.array([*rows, np.ones(len(times))])

    def reader(self) -> Callable[[float], Array]:
        """Inputs as a function of one time; the array it gives is used again at the next call."""
        readers = [self._reader(i) for i in range(len(self.drive.scale))]
        values = np.ones(len(readers) + 1)

        def at(time: float) -> Array:
            for i, read in enumerate(readers):
                values[i] = read(time)
            return values

        return at

    def _values(self, index: int, times: Array) -> Array:
        table, signal, scale = self.drive.tables[index], self.drive.signals[index], self.drive.scale[index]
        if table is not None:
            return np.asarray(scale * np.interp(times / self.drive.time_scale, *table))
        assert signal is not None
        return np.asarray(scale * signal.values(times / self.drive.time_scale))

    def _reader(self, index: int) -> Callable[[float], float]:
        table = self.drive.tables[index]
        if table is not None:
            return _linear(table[0] * self.drive.time_scale, table[1] * self.drive.scale[index], self.end)
        inside = _INSIDE * (self.end - self.start)

        def sample(times: Array) -> Array:
            return self._values(index, np.clip(times, self.start + inside, self.end - inside))

        return _cubic(sample, self.start, self.end)


def drive_of(circuit: Circuit, sources: tuple[Part, ...], waveforms: Mapping[str, tuple[Array, Array]]) -> Drive:
    """Drive of the source parts of a board.

    Parameters
    ----------
    circuit
        Its sources' waveforms and time scale are used.
    sources
        Source parts in the order of the network's inputs.
    waveforms
        Stand-ins for inputs known only by their bounds: name -> (times, values) in problem time and units.
    """
    signals: list[Waveform | None] = []
    tables: list[tuple[Array, Array] | None] = []
    jumps: set[float] = set()
    for part in sources:
        source = circuit.sources.get(part.model)
        wave = source.waveform if source is not None else None
        table = None
        if part.model in waveforms:
            table = waveforms[part.model]
        elif wave is None:
            table = (np.zeros(1), np.zeros(1))
        elif wave.recording is not None:
            table = (np.array(wave.recording.times), np.array(wave.recording.values))
        else:
            jumps.update(float(t) * circuit.time_scale for t in wave.jumps(circuit.duration / circuit.time_scale))
        if table is not None:
            jumps.update((table[0][1:][np.diff(table[0]) == 0.0] * circuit.time_scale).tolist())
        signals.append(wave if table is None else None)
        tables.append(table)
    for name in {p.control for p in circuit.parts if p.control}:
        line = circuit.sources[name].waveform
        if line is not None:
            jumps.update(float(t) * circuit.time_scale for t in line.jumps(circuit.duration / circuit.time_scale))
    inner = sorted(t for t in jumps if 0.0 < t < circuit.duration)
    return Drive(tuple(signals), tuple(tables), tuple(p.value for p in sources), circuit.time_scale, tuple(inner))


def high_lines(circuit: Circuit, time: float) -> frozenset[str]:
    """Sources whose control lines are high: those that are not zero at a time [circuit s]."""
    at = np.array([time / circuit.time_scale])
    names = {p.control for p in circuit.parts if p.control}
    waves = {name: circuit.sources[name].waveform for name in names}
    return frozenset(name for name, wave in waves.items() if wave is not None and wave.values(at)[0] != 0.0)


def _linear(times: Array, values: Array, end: float) -> Callable[[float], float]:
    rises = np.diff(times)
    slopes = np.divide(np.diff(values), rises, out=np.zeros(len(rises)), where=rises > 0.0)
    knots, heights, tilts = times.tolist(), values.tolist(), [*slopes.tolist(), 0.0]
    before_end = end * (1.0 - _INSIDE)

    def read(time: float) -> float:
        time = min(time, before_end)
        i = max(bisect_right(knots, time) - 1, 0)
        return float(heights[i] + tilts[i] * max(time - knots[i], 0.0))

    return read


def _cubic(sample: Callable[[Array], Array], start: float, end: float) -> Callable[[float], float]:
    """Table of local cubics through four equidistant samples (Newton's forward differences)."""
    steps = 32
    values = sample(np.linspace(start, end, steps + 1))
    while True:
        finer = sample(np.linspace(start, end, 2 * steps + 1))
        first = np.clip(np.arange(steps) - 1, 0, steps - 3)
        place = np.arange(steps) + 0.5 - first
        off = np.abs(_newton(values, first, np.asarray(place)) - finer[1::2]).max()
        steps, values = 2 * steps, finer
        if off <= _TABLE_ERROR * np.abs(finer).max() or steps >= _MOST_STEPS:
            break
    if np.ptp(values) == 0.0:
        level = float(values[0])
        return lambda time: level
    rows = [np.diff(values, n)[: len(values) - 3].tolist() for n in range(4)]
    base, one, two, three = rows
    per_step, last = steps / (end - start), steps - 3

    def read(time: float) -> float:
        place = (time - start) * per_step
        i = min(max(int(place) - 1, 0), last)
        s = place - i
        return float(base[i] + s * (one[i] + (s - 1.0) / 2.0 * (two[i] + (s - 2.0) / 3.0 * three[i])))

    return read


def _newton(values: Array, first: NDArray[np.int_], s: Array) -> Array:
    zero, one, two, three = (np.diff(values, n)[first] for n in range(4))
    return np.asarray(zero + s * (one + (s - 1.0) / 2.0 * (two + (s - 2.0) / 3.0 * three)))
