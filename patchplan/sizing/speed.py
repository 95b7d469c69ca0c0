"""How fast the circuit should run: the window, what limits each end, and the best place inside."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import SpeedLimit, Target
from patchplan.sizing.speed_errors import COMFORTABLE, bias_error, lag_errors, leak_error
from patchplan.sizing.speed_limits import cost_beyond, find_limits, ground_of, hard_ends, network_leak, window_of

Array = NDArray[np.float64]
#: A faster plan is preferred while it costs no more than this fraction of peak over the best.
SLACK = 1e-4
#: The planner's own speed keeps capacitors at or above this, so that some 10 pF of wiring and input capacitance count
#: for 0.1 % at most [F] (common practice, no source).
ABOVE_STRAYS = 1e-8


@dataclass(frozen=True)
class Speed:
    """The window of the time scale [circuit s per unit of problem time] and the choice in it.

    ``predicted`` is the error expected from bandwidth and bias current at the chosen speed, as a fraction of peak;
    ``lag`` the error by bandwidth alone, times the time scale, and ``leak`` the one by finite gain at the chosen speed,
    both of shape ``(n_watched, n_times)``; ``rows`` holds every limit.
    ``hard`` holds the ends beyond which no values reach, ``cost`` what a speed outside the window costs, in words.
    """

    window: tuple[float, float]
    limits: tuple[str, str]
    chosen: float
    predicted: float
    lag: Array
    leak: Array
    rows: tuple[SpeedLimit, ...]
    hard: tuple[SpeedLimit, SpeedLimit]
    cost: str = ""


def choose_speed(
    form: Form, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, target: Target, *, given: float | None = None
) -> Speed:
    """Find the window and the time scale to aim at.

    Parameters
    ----------
    given
        Time scale asked for, else None for the planner's choice: the fastest whose predicted error is within
        :data:`SLACK` of the least.
    """
    ground = ground_of(form, patch, ranges, sensitivity, target)
    scales, gains = ground.scales, ground.gains
    limits = find_limits(ground)
    fast, slow = window_of(limits)
    low, high = fast.time_scale, slow.time_scale
    low = low or 1e-6 * high  # nothing moves, so that nothing limits the speed either
    parts = lag_errors(patch, sensitivity, target, scales)
    late = parts[0] + parts[1]
    lag = float(np.max(np.abs(late), initial=0.0))
    plain = min(high, _plain_end(target, gains))
    if given is not None:
        chosen = given
    elif low >= high:
        chosen = float(np.sqrt(low * high))
    else:
        grid = np.geomspace(low, plain if low < plain else high, 81)
        error = lag / grid + bias_error(patch, sensitivity, target, scales, gains, grid)
        good = (error <= 1.1 * error.min() + SLACK) & (grid >= min(grid[-1], _above_strays(gains)))
        chosen = float(grid[np.argmax(good)] if good.any() else grid[np.argmin(error)])
    bias = float(bias_error(patch, sensitivity, target, scales, gains, np.array([chosen]))[0])
    leak = leak_error(patch, sensitivity, target, scales, gains) + network_leak(ground, chosen)
    beyond = None if given is None or low <= given <= high else fast if given < low else slow
    cost = cost_beyond(ground, beyond, given) if given is not None and beyond is not None else ""
    texts = (fast.text, slow.text)
    return Speed((low, high), texts, chosen, lag / chosen + bias, late, leak, limits, hard_ends(limits), cost)


def _plain_end(target: Target, gains: Mapping[str, Array]) -> float:
    """Highest time scale at which every leg is a single resistor."""
    largest = target.resistors[-1] * target.capacitors[-1]
    return min((float(g.min()) * largest for g in gains.values() if g.size), default=np.inf)


def _above_strays(gains: Mapping[str, Array]) -> float:
    """Time scale at which the fastest stage's capacitor is :data:`ABOVE_STRAYS` at comfortable resistors."""
    middles = [float(np.sqrt(g.min() * g.max())) for g in gains.values() if g.size]
    return max(middles, default=0.0) * COMFORTABLE * ABOVE_STRAYS
