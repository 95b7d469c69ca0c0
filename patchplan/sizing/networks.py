"""Networks of three resistors that stand for one larger than any: a divider from the source and a resistor onwards.

A leg R1 (from the source), R2 (to ground), R3 (to the summing node) passes the current of R1 + R3 + R1*R3/R2, while the
summing node sees little more than R3. What that costs is counted elsewhere: offsets and finite gain act through what
the summing node sees, and the three tolerances add up.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.records import Leg

Array = NDArray[np.float64]
#: Last resistors that are tried: the largest one and the next below it. The larger, the less offsets count.
LAST = 6
#: Networks are kept one for each step of this size in the log of the transfer resistance.
STEP = 0.002
#: First resistors are near this value [ohm]: light for the node that drives them, and small against the input
#: resistance and strays of what follows (common practice, no source).
FIRST = 1e5


@lru_cache(maxsize=8)
def largest_transfer(resistors: tuple[float, ...]) -> float:
    """Largest transfer resistance that three resistors of a rising series make [ohm]."""
    return Leg((resistors[-1], resistors[0], resistors[-1])).transfer


@lru_cache(maxsize=8)
def networks(resistors: tuple[float, ...]) -> tuple[tuple[float, float, float], ...]:
    """Networks above the largest resistor, rising in transfer resistance, one for each :data:`STEP` where there is one.

    Within a step the larger last resistor wins, as the summing node sees it, then the first resistor nearest to
    :data:`FIRST`.
    """
    values = np.array(resistors)
    last, shunt, first = (a.ravel() for a in np.meshgrid(values[-LAST:], values, values, indexing="ij"))
    transfer = first + last + first * last / shunt
    step = np.floor(np.log(transfer / values[-1]) / STEP).astype(int)
    order = np.lexsort((shunt, np.abs(np.log(first / FIRST)), -last, step))
    order = order[step[order] >= 0]
    kept = order[np.flatnonzero(np.diff(step[order], prepend=-1))]
    kept = kept[np.argsort(transfer[kept], kind="stable")]
    return tuple(zip(first[kept].tolist(), shunt[kept].tolist(), last[kept].tolist(), strict=True))


@dataclass(frozen=True)
class Legs:
    """Legs of any values as arrays of one shape: a single resistor has no first and an endless shunt [ohm]."""

    first: Array
    shunt: Array
    last: Array

    @property
    def into(self) -> Array:
        """What the summing node sees, as :attr:`Leg.into`."""
        return self.last + self.first / (1.0 + self.first / self.shunt)

    @property
    def spread(self) -> Array:
        """Relative change per relative change of the resistors, as :attr:`Leg.spread`."""
        cross = self.first * self.last / self.shunt
        far = np.where(self.first > 0.0, self.first + cross, 0.0)
        moved = np.sqrt(far**2 + cross**2 + (self.last + cross) ** 2)
        return np.asarray(moved / (self.first + self.last + cross))

    def leg(self, *place: int) -> Leg:
        """One of them."""
        first, shunt, last = (float(a[place]) for a in (self.first, self.shunt, self.last))
        return Leg((first, shunt, last) if first else (last,))


def exact_legs(transfer: Array, resistors: tuple[float, ...]) -> Legs:
    """Legs of exactly these transfer resistances, a network wherever one resistor of the series would not reach."""
    most = resistors[-1]
    long = transfer > most
    first = np.clip(FIRST, resistors[0], most)
    # Just above the largest resistor the two in series have to share what is left.
    first = np.where(long, np.minimum(first, (transfer - most) / 2), 0.0)
    rest = np.where(long, transfer - most - first, 1.0)
    shunt = np.where(long, first * most / rest, np.inf)
    return Legs(first, shunt, np.where(long, most, transfer))
