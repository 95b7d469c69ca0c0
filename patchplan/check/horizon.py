"""Exponential growth of sensitivity, and how far a pointwise comparison means anything."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.horizon import first_beyond, growth_exponent
from patchplan.patch.records import Patch
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing

Array = NDArray[np.float64]

#: Coefficients are taken to be off by at least this; a signal that moves this share of its peak ends the comparison.
_LEAST_COEFFICIENT_ERROR, _MOVED = 1e-3, 0.01


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
    return first_beyond(sensitivity, off, _MOVED)
