"""Combinations of parts, values, speed and form, each a Build, and their figures."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from patchplan.check.records import Cause
from patchplan.equation.problem import Build


@dataclass(frozen=True, slots=True)
class Axes:
    """What to vary; an empty axis stays as in the problem file. With all empty, a grid is made of the catalogue.

    Attributes
    ----------
    op_amps, series
        Names; ``series`` of the resistors.
    tolerances
        Of resistors and of capacitors, (0.01, 0.02) for 1 % and 2 %; None as second leaves the file's.
    supplies
        (low, high) rails [V].
    speeds
        As ``Build.speed``.
    """

    op_amps: tuple[str, ...] = ()
    series: tuple[str, ...] = ()
    tolerances: tuple[tuple[float, float | None], ...] = ()
    supplies: tuple[tuple[float, float], ...] = ()
    speeds: tuple[str | float, ...] = ()

    @property
    def given(self) -> bool:
        """Whether any axis is."""
        return any((self.op_amps, self.series, self.tolerances, self.supplies, self.speeds))


@dataclass(frozen=True)
class Option:
    """One combination with its figures.

    Attributes
    ----------
    build
        The wishes of the combination, form of the equations included.
    error_percent
        Predicted error of the nominal board as the check counts it [% of peak, or of half the swing where a node
        carries an offset], and ``causes`` of it, largest first.
    spread_percent
        One standard deviation between boards, counted alike, and ``spread_causes`` of it, largest first.
    of_peak
        Both in percent of the whole peak, whatever the form; None where that is the same.
    parts
        What has to be fitted: packages, resistors, capacitors and the rest.
    supply_current
        Estimate of what one rail gives [A].
    speed
        How many times faster than the problem the circuit runs.
    best
        Whether no other combination is at least as good in all five figures and better in one.
    fault
        Why it cannot be built, "" where it can; the figures then say nothing.
    """

    build: Build
    error_percent: float = 0.0
    spread_percent: float = 0.0
    parts: int = 0
    packages: int = 0
    supply_current: float = 0.0
    speed: float = 0.0
    causes: tuple[Cause, ...] = ()
    spread_causes: tuple[Cause, ...] = ()
    of_peak: tuple[float, float] | None = None
    best: bool = False
    fault: str = ""

    @property
    def figures(self) -> tuple[float, ...]:
        """The five figures that are compared, error and spread of the whole peak; less is better in each."""
        error, spread = self.of_peak or (self.error_percent, self.spread_percent)
        return (error, spread, self.parts, self.packages, self.supply_current)


@dataclass(frozen=True)
class Wish:
    """What a pick has to meet: largest nominal error and, where not None, largest spread [% of peak]."""

    error_percent: float
    spread_percent: float | None = None


@dataclass(frozen=True)
class Comparison:
    """All combinations of one problem, in the order of the grid."""

    title: str
    options: tuple[Option, ...]
    time_unit: str = "s"


@dataclass(frozen=True)
class SpeedCurve:
    """Predicted error and spread against speed [% of peak] of boards whose values are exact at every speed.

    The values of the plan add their rounding, and may make up for a part of the error.

    Attributes
    ----------
    time_scales
        Rising; the plan's own is one of them.
    error, spread
        Largest over watched signals and time: the nominal board's error; the standard deviation between boards.
    parts, spreads
        The same by cause, each alone.
    chosen, real_time
        (error, spread) at the plan's time scale, and in real time (where parts are counted: from those).
    judgement
        Real time is ``possible``, ``with other parts``, ``outside`` the window at a larger error, or ``impossible``.
    reason
        A sentence on it.
    """

    time_scales: tuple[float, ...]
    error: tuple[float, ...]
    spread: tuple[float, ...]
    parts: Mapping[str, tuple[float, ...]]
    spreads: Mapping[str, tuple[float, ...]]
    chosen: tuple[float, float]
    real_time: tuple[float, float]
    judgement: str
    reason: str
