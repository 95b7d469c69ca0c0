"""The Verdict: what the board does against what the equation says."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class SignalError:
    """Errors of one watched signal, percent of its peak in the Reference (half its swing where offset)."""

    name: str
    max_error_percent: float
    rms_error_percent: float
    spread_percent: float
    stretched_error_percent: float
    frequency_error_percent: float


@dataclass(frozen=True, slots=True)
class NodePeak:
    """Largest voltage of one node against its limit.

    Attributes
    ----------
    time
        When [circuit s].
    cause
        A sentence if not ok.
    over_from, over_until
        First and last time above the limit [circuit s], 0 where never.
    during
        The watched signal whose worst case made the peak, "" for the run that the netlist holds.
    """

    node: str
    peak_volts: float
    limit_volts: float
    ok: bool
    time: float = 0.0
    cause: str = ""
    over_from: float = 0.0
    over_until: float = 0.0
    during: str = ""


@dataclass(frozen=True, slots=True)
class Cause:
    """One line of the error budget."""

    cause: str
    error_percent: float


@dataclass(frozen=True)
class Curve:
    """One watched signal over the run [problem time], all in problem units."""

    name: str
    times: Array
    reference: Array
    circuit: Array


@dataclass(frozen=True)
class Verdict:
    """The check's result; ``verdict`` is follows, inaccurate, overload or not_buildable.

    ``volts`` holds every signal node over ``times`` [circuit s]; ``horizon`` is in problem time, None where none.
    """

    verdict: str
    max_error_percent: float
    rms_error_percent: float
    spread_percent: float
    horizon: float | None
    signals: tuple[SignalError, ...]
    nodes: tuple[NodePeak, ...]
    budget: tuple[Cause, ...]
    curves: tuple[Curve, ...] = ()
    times: Array = field(default_factory=lambda: np.zeros(0))
    volts: Mapping[str, Array] = field(default_factory=dict)
    warnings: tuple[str, ...] = ()
