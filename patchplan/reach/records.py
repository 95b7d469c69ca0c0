"""What Reach finds: the true solution, the runs, and the range of every signal of the equation."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Reference:
    """scipy's solution of the problem as written, nominal parameters.

    Attributes
    ----------
    names
        Every state, source and signal of the System, in that order.
    times
        Rising, from 0 to the duration, fine enough for linear interpolation between rows to err by less than 1e-4 of
        the peak; a jump of an input appears as two equal times (before, after) [problem time].
    values, rates
        Shape ``(n_names, n_times)``: each signal and its time derivative [problem units].
    jumps
        Times at which an input jumps or its slope does [problem time].
    waveforms
        Stand-in waveforms used for inputs known only by bounds: name -> (times, values).
    """

    names: tuple[str, ...]
    times: Array
    values: Array
    rates: Array
    jumps: tuple[float, ...] = ()
    waveforms: Mapping[str, tuple[Array, Array]] = field(default_factory=dict)

    def of(self, name: str) -> Array:
        """Values of one signal, shape ``(n_times,)``."""
        row: Array = self.values[self.names.index(name)]
        return row


@dataclass(frozen=True)
class Run:
    """One simulated run of the equation: knob values, times and every signal, shapes as in Reference."""

    knobs: Mapping[str, float]
    times: Array
    values: Array
    rates: Array


@dataclass(frozen=True, slots=True)
class Range:
    """Range of one signal [problem units].

    Attributes
    ----------
    known_by
        ``proved``, ``simulated`` or ``stated``.
    margin
        What was added at each end beyond the runs, and ``reason`` says where it comes from.
    """

    name: str
    low: float
    high: float
    known_by: str
    margin: float = 0.0
    reason: str = ""

    @property
    def peak(self) -> float:
        """Largest magnitude."""
        return max(abs(self.low), abs(self.high))


@dataclass(frozen=True)
class Reach:
    """Ranges of all signals of the equation, and where they come from.

    Attributes
    ----------
    ranges
        By name: every state, source and signal of the System.
    runs
        All runs share ``names`` of the Reference; the first is the nominal one.
    """

    reference: Reference
    ranges: Mapping[str, Range]
    runs: tuple[Run, ...]
    warnings: tuple[str, ...] = ()
