"""Trimmers, as records."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Trimmer:
    """One resistor that is made adjustable, and what to watch while setting it.

    Attributes
    ----------
    stage, wire
        Whose leg it is; wire -1 is the resistor from the reference of a start network.
    ohms
        Nominal [ohm].
    reach
        Share of ``ohms`` that it has to move either way, so that worst-case tolerances are taken up.
    watch, time, value
        Set it until this watched signal [problem units] has this value at this time [problem time].
    figure
        What that is of the signal: start value, final value, peak, zero crossing or value.
    per_percent
        How far the signal moves there for each percent more resistance [problem units].
    """

    stage: str
    wire: int
    ohms: float
    reach: float
    watch: str
    time: float
    value: float
    figure: str
    per_percent: float


@dataclass(frozen=True, slots=True)
class Trimming:
    """The smallest set of trimmers found that takes up what tolerances do to the watched signals, in setting order.

    Attributes
    ----------
    trimmers
        Empty where tolerances do too little to matter.
    loops
        Independent errors of ratios that the watched signals can show, their scales and the speed held.
    least
        Fewest trimmers proved necessary.
    rounds
        How often all are set in turn.
    before, after
        Spread by resistors, capacitors and multiplier scales without and with them, fractions of the error base.
    fitted
        Whether the board has them.
    """

    trimmers: tuple[Trimmer, ...]
    loops: int
    least: int
    rounds: int
    before: float
    after: float
    fitted: bool = False
