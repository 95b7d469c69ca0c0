"""Exponential growth of sensitivity, and how far a pointwise comparison means anything."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.patch.records import Patch
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing

Array = NDArray[np.float64]

#: Growth exponent times duration from which growth counts as exponential.
_LEAST_GROWTH = 5.0
#: The second half of the run must grow at least at this share of the run's mean rate: power laws and transients do not.
_STEADY_SHARE = 0.6
_LEAST_COEFFICIENT_ERROR, _MOVED = 1e-3, 0.01


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
    return mean if mean * duration > _LEAST_GROWTH and second > _STEADY_SHARE * mean else 0.0


def horizon_of(system: System, sensitivity: Sensitivity, patch: Patch, sizing: Sizing) -> float | None:
    """Problem time up to which boards can be compared point by point; None where there is no such limit.

    Parameters
    ----------
    system
        A linear system has no horizon.
    sensitivity, patch, sizing
        The plan; the coefficients' realised errors are read from ``sizing``, at least 0.1 % each.
    """
    if system.is_linear or growth_exponent(sensitivity) == 0.0:
        return None
    errors = {c.at: abs(c.error_percent) / 100.0 for c in sizing.coefficients if c.wanted}
    stages = {s.name: s for s in patch.stages}
    off = np.full(len(sensitivity.wires), _LEAST_COEFFICIENT_ERROR)
    for i, (name, wire) in enumerate(sensitivity.wires):
        at = f"{stages[name].node}<-{stages[name].wires[wire].source}"
        off[i] = max(off[i], errors.get(at, 0.0))
    moved = np.sqrt(np.sum((sensitivity.coefficient * off[None, :, None]) ** 2, axis=1)).max(axis=0)
    beyond = np.flatnonzero(moved >= _MOVED)
    return float(sensitivity.times[beyond[0]]) if len(beyond) else None
