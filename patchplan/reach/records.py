"""What Reach finds: the true solution, the runs, and the range of every signal of the equation."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.collocation import Pieces

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
    """One simulated run of the equation: knob values, times and every signal, shapes as in Reference.

    ``point`` holds the values of all parameters that were moved for it.
    """

    knobs: Mapping[str, float]
    times: Array
    values: Array
    rates: Array
    point: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class WorstPoint:
    """Values of the parameters at which one signal went furthest, and how far [problem units]."""

    name: str
    value: float
    parameters: Mapping[str, float]


@dataclass(frozen=True)
class Box:
    """The search over adjustable and uncertain parameters.

    Attributes
    ----------
    corners, sampled, climbed
        Runs at corners (and ends of axes), at points of a Sobol sample, and around the worst so far.
    all_corners
        Whether every corner was run; of many parameters only some are.
    worst
        Of every name.
    waveforms
        Waveforms of inputs known only by bounds under which corners and sample were run, 1 where there are none.
    """

    parameters: tuple[str, ...]
    corners: int
    sampled: int
    climbed: int
    all_corners: bool
    worst: tuple[WorstPoint, ...] = ()
    waveforms: int = 1

    @property
    def runs(self) -> int:
        """All runs."""
        return self.waveforms * (self.corners + self.sampled) + self.climbed


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
class Response:
    """What an impulse of one source known only by its bounds does to the states of a linear System.

    Attributes
    ----------
    place
        Place of the source among the sources.
    middle, half
        Middle and half width of its bounds [problem units].
    pieces
        The states after the impulse.
    missed
        Shape ``(n_states,)``: bound of the integral over the run of how far ``pieces`` may be from the truth.
    proved
        Whether that bound is a proof.
    """

    source: str
    place: int
    middle: float
    half: float
    pieces: Pieces
    missed: Array
    proved: bool


@dataclass(frozen=True)
class Bounded:
    """A linear System under inputs known only by their bounds, at one setting of its knobs.

    Attributes
    ----------
    names
        Of the Reference.
    rows
        Every name as a sum of 1, the states and the sources: sparse, shape ``(n_names, 1 + n_states + n_sources)``.
    slopes
        Rates of the states in the same terms, shape ``(n_states, 1 + n_states + n_sources)``.
    middle
        The run with every such input at the middle of its bounds.
    """

    names: tuple[str, ...]
    rows: Any
    slopes: Any
    middle: Run
    responses: tuple[Response, ...]


@dataclass(frozen=True)
class WorstCase:
    """The waveforms inside their bounds that drive one watched signal furthest, and the run with them.

    Attributes
    ----------
    value, time
        The extreme that the run reaches [problem units], and when [problem time].
    said
        Sentences on the waveforms.
    """

    signal: str
    value: float
    time: float
    reference: Reference
    said: tuple[str, ...] = ()


@dataclass(frozen=True)
class Reach:
    """Ranges of all signals of the equation, and where they come from.

    Attributes
    ----------
    ranges
        By name: every state, source and signal of the System.
    runs
        All runs share ``names`` of the Reference; the first is the nominal one.
    bounded
        Of a linear System with inputs known only by their bounds: what proves the range of any sum of its signals, at
        the nominal setting first.
    worst
        The worst case of each watched signal that such inputs move; the Reference is that of the first.
    """

    reference: Reference
    ranges: Mapping[str, Range]
    runs: tuple[Run, ...]
    warnings: tuple[str, ...] = ()
    bounded: tuple[Bounded, ...] = ()
    worst: tuple[WorstCase, ...] = ()
    box: Box | None = None
