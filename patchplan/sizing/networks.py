"""Networks of three resistors that stand for one larger than any: a divider from the source and a resistor onwards.

A leg R1 (from the source), R2 (to ground), R3 (to the summing node) passes the current of R1 + R3 + R1*R3/R2, while the
summing node sees little more than R3. What that costs is counted elsewhere: offsets and finite gain act through what
the summing node sees, and the three tolerances add up.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.records import Leg

Array = NDArray[np.float64]
#: Last resistors that are tried: the largest one and the next below it. The larger, the less offsets count.
LAST = 6
#: Networks are kept one for each step of this size in the log of the transfer resistance; the finer one serves boards
#: whose single resistors may be pairs.
STEP, FINE = 0.002, 0.0002
#: First resistors are near this value [ohm]: light for the node that drives them, and small against the input
#: resistance and strays of what follows (common practice, no source).
FIRST = 1e5
#: First resistors are no smaller than this where the series has larger ones [ohm]: five times the usual rated load
#: (common practice, no source).
LIGHTEST = 1e4


@lru_cache(maxsize=8)
def largest_transfer(resistors: tuple[float, ...]) -> float:
    """Largest transfer resistance that three resistors of a rising series make [ohm]."""
    return Leg((resistors[-1], resistors[0], resistors[-1])).transfer


@lru_cache(maxsize=8)
def networks(resistors: tuple[float, ...], step: float = STEP) -> tuple[tuple[float, float, float], ...]:
    """Networks above the largest resistor, rising in transfer resistance, one for each step of its log if there is one.

    Within a step the larger last resistor wins, as the summing node sees it, then the first resistor nearest to
    :data:`FIRST`.
    """
    values = np.array(resistors)
    light = values[values >= min(LIGHTEST, resistors[-1])]
    last, shunt, first = (a.ravel() for a in np.meshgrid(values[-LAST:], values, light, indexing="ij"))
    transfer = first + last + first * last / shunt
    steps = np.floor(np.log(transfer / values[-1]) / step).astype(int)
    order = np.lexsort((shunt, np.abs(np.log(first / FIRST)), -last, steps))
    order = order[steps[order] >= 0]
    kept = order[np.flatnonzero(np.diff(steps[order], prepend=-1))]
    kept = kept[np.argsort(transfer[kept], kind="stable")]
    return tuple(zip(first[kept].tolist(), shunt[kept].tolist(), last[kept].tolist(), strict=True))


def exact_leg(transfer: float, resistors: tuple[float, ...]) -> Leg:
    """Leg of exactly this transfer resistance, a network where one resistor of the series would not reach."""
    most = resistors[-1]
    if transfer <= most:
        return Leg((transfer,))
    # Just above the largest resistor the two in series have to share what is left.
    first = min(max(FIRST, resistors[0]), most, (transfer - most) / 2)
    return Leg((first, first * most / (transfer - most - first), most))


def exact_into(transfer: Array, resistors: tuple[float, ...]) -> Array:
    """What the summing node sees into legs of exactly these transfer resistances, any shape [ohm]."""
    most = resistors[-1]
    left = np.maximum(transfer - most, 1e-12 * most)
    first = np.minimum(np.clip(FIRST, resistors[0], most), left / 2)
    shunt = first * most / (left - first)
    return np.asarray(np.where(transfer > most, most + first * shunt / (first + shunt), transfer))
