"""How far each watched signal moves when a coefficient, a rate, a lag or a start value is off."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Sensitivity:
    """Linear responses of the watched signals, as fractions of each watched signal's error base.

    Attributes
    ----------
    watched
        Names, length ``n_watched``.
    base
        Error base of each [problem units]: the signal's peak, or half its swing where its node carries an offset.
    times
        Shape ``(n_times,)`` [problem time]; at most a few hundred.
    wires
        (stage name, wire index): every wire of integrators, summers and inverters, and (multiplier, 0) for the gain of
        a multiplier.
    coefficient
        Shape ``(n_watched, n_wires, n_times)``: per relative change of the wire's coefficient.
    stages
        Names of integrators, summers, inverters and multipliers.
    rate
        Shape ``(n_watched, n_stages, n_times)``: integrators: per constant added to signal' [problem units/problem time];
        other stages: per constant added to the signal at their output [problem units].
    lag
        Shape ``(n_watched, n_stages, n_times)``: per unit of problem time by which the stage's output comes late
        (integrators: by which their input sum comes late).
    start
        Integrator -> shape ``(n_watched, n_times)``: per unit added to the start value [problem units].
    """

    watched: tuple[str, ...]
    base: Array
    times: Array
    wires: tuple[tuple[str, int], ...]
    coefficient: Array
    stages: tuple[str, ...]
    rate: Array
    lag: Array
    start: Mapping[str, Array]
