"""Exponential growth of sensitivity: up to when a pointwise comparison means anything."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from patchplan.sensitivity import Sensitivity

Array = NDArray[np.float64]
#: Growth exponent times duration from which growth counts as exponential.
_LEAST_GROWTH = 5.0
#: The second half of the run must grow at least at this share of the run's mean rate: power laws and transients do not.
_STEADY_SHARE = 0.6
#: What a coefficient is taken to be off by, and the share of peak that a signal may move for it, before values are
#: chosen.
_COEFFICIENT_ERROR, _MOVED = 1e-3, 0.01


def growth_exponent(sensitivity: Sensitivity) -> float:
    """Finite-time exponent of the start responses [1/problem time]; 0 where they do not grow exponentially."""
    if not sensitivity.start or len(sensitivity.times) < 8:
        return 0.0
    size = np.sqrt(sum(np.sum(response**2, axis=0) for response in sensitivity.start.values()))
    times = sensitivity.times
    usable = size > 0.0
    duration = float(times[-1])
    late, early = usable & (times >= 0.5 * duration), usable & (times >= 0.1 * duration)
    if late.sum() < 4:
        return 0.0
    mean = float(np.polyfit(times[early], np.log(size[early]), 1)[0])
    second = float(np.polyfit(times[late], np.log(size[late]), 1)[0])
    grows = mean * duration > _LEAST_GROWTH and second > _STEADY_SHARE * mean
    return mean if grows and not _is_power(times[early], size[early]) else 0.0


def _is_power(times: Array, size: Array) -> bool:
    """Whether a power of time fits a growth at least as well as an exponential does."""
    off = [np.polyfit(x, np.log(size), 1, full=True)[1].sum() for x in (times, np.log(times))]
    return bool(off[1] <= off[0])


def first_beyond(sensitivity: Sensitivity, off: Array, moved: float) -> float | None:
    """First time at which relative errors ``off`` of the wires, shape ``(n_wires,)``, move a watched signal by
    ``moved`` of its error base (root sum of squares); None where they never do [problem time].
    """
    total = np.sqrt(np.sum((sensitivity.coefficient * off[None, :, None]) ** 2, axis=1)).max(axis=0)
    beyond = np.flatnonzero(total >= moved)
    return float(sensitivity.times[beyond[0]]) if len(beyond) else None


def within_horizon(sensitivity: Sensitivity, *, linear: bool) -> Sensitivity:
    """The responses up to where coefficients 0.1 % off move a watched signal by 1 %, if they grow exponentially.

    Beyond it a chaotic system forgets its coefficients, and errors summed there would say nothing of values or speed.
    """
    if linear or growth_exponent(sensitivity) == 0.0:
        return sensitivity
    end = first_beyond(sensitivity, np.full(len(sensitivity.wires), _COEFFICIENT_ERROR), _MOVED)
    rows = len(sensitivity.times) if end is None else max(2, int(np.searchsorted(sensitivity.times, end)))
    return replace(
        sensitivity,
        times=sensitivity.times[:rows],
        coefficient=sensitivity.coefficient[..., :rows],
        rate=sensitivity.rate[..., :rows],
        lag=sensitivity.lag[..., :rows],
        start={name: response[..., :rows] for name, response in sensitivity.start.items()},
        leak={name: response[..., :rows] for name, response in sensitivity.leak.items()},
    )
