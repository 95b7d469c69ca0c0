"""Preferred values after IEC 60063: E3 to E192."""

from __future__ import annotations

import math
from functools import cache

#: Members of E24 that history set apart from the rounded geometric series (IEC 60063), by position.
_E24_BY_HISTORY = {10: 2.7, 11: 3.0, 12: 3.3, 13: 3.6, 14: 3.9, 15: 4.3, 16: 4.7, 22: 8.2}
#: The one member of E192 that differs from the rounded geometric series (IEC 60063).
_E192_BY_HISTORY = {185: 9.20}

#: Names of the series, coarse to fine.
SERIES = ("E3", "E6", "E12", "E24", "E48", "E96", "E192")


@cache
def series_values(name: str) -> tuple[float, ...]:
    """Mantissas of a series, rising, from 1 up to below 10.

    Parameters
    ----------
    name
        ``E3``, ``E6``, ``E12``, ``E24``, ``E48``, ``E96`` or ``E192``.

    Raises
    ------
    ValueError
        For any other name.
    """
    if name not in SERIES:
        raise ValueError(f"There is no series {name!r}. The series are {', '.join(SERIES)}.")
    count = int(name[1:])
    if count <= 24:
        full = [_E24_BY_HISTORY.get(i, round(10 ** (i / 24), 1)) for i in range(24)]
        return tuple(full[:: 24 // count])
    full = [_E192_BY_HISTORY.get(i, round(10 ** (i / 192), 2)) for i in range(192)]
    return tuple(full[:: 192 // count])


def values_between(series: str, low: float, high: float) -> tuple[float, ...]:
    """All values of a series from low to high, both included, rising.

    Parameters
    ----------
    series
        Name of the series.
    low, high
        Ends, both above 0, in any unit.

    Raises
    ------
    ValueError
        For an unknown series.
    """
    decades = range(math.floor(math.log10(low)) - 1, math.ceil(math.log10(high)) + 1)
    # Through decimal text, so that 4.7 nF is the same float as the literal 4.7e-9.
    values = (float(f"{mantissa}e{decade}") for decade in decades for mantissa in series_values(series))
    slack = 1e-12
    return tuple(v for v in values if low * (1 - slack) <= v <= high * (1 + slack))
