"""The search over adjustable and uncertain parameters, told in the signals and knobs of the System that is planned."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.constants import constant_value
from patchplan.equation.system import System
from patchplan.reach.field import Field, field_of
from patchplan.reach.inputs import Inputs
from patchplan.reach.nominal import tabulate
from patchplan.reach.records import Run
from patchplan.reach.search import Excursion, search_box
from patchplan.reach.solve import GrowsWithoutBoundError

Array = NDArray[np.float64]


def knobs_of(system: System, point: Mapping[str, float]) -> dict[str, float]:
    """Values of a System's own knobs where parameters have the values of ``point``."""
    values = {p.name: Fraction(point[p.name]) for p in system.adjustable}
    return {k.name: float(constant_value(k.tree, values)) for k in system.knobs}


def search_boxes(
    system: System, numeric: Field, uncertain: System | None, inputs: Inputs, times: Array, peaks: Array
) -> Excursion:
    """`search_box` over adjustable parameters, and over uncertain ones within their tolerance.

    Parameters
    ----------
    uncertain
        The System with its uncertain parameters left open as well; None where there are none.

    Raises
    ------
    GrowsWithoutBoundError
        A setting of the adjustable parameters makes the solution grow without bound; the error has the setting. Where
        only uncertain ones do, a warning says so.
    """
    if uncertain is not None:
        try:
            found = search_box(uncertain, field_of(uncertain), inputs, times, peaks)
            return _told(system, numeric, uncertain, inputs, found)
        except GrowsWithoutBoundError as error:
            setting = ", ".join(f"{name} = {value:.6g}" for name, value in error.point.items())
            said = (
                f"Within the tolerance of the parameters the solution grows without bound, at t = {error.time:.4g} "
                f"where {setting}: the ranges leave tolerances out.",
            )
        if not system.adjustable:
            none = np.zeros(len(numeric.names))
            return Excursion(none + np.inf, none - np.inf, warnings=said)
        return replace(search_box(system, numeric, inputs, times, peaks), warnings=said)
    return search_box(system, numeric, inputs, times, peaks)


def _told(system: System, numeric: Field, uncertain: System, inputs: Inputs, found: Excursion) -> Excursion:
    """Runs with the names and knobs of the System that is planned; signals only it has follow from the states."""
    names = field_of(uncertain).names
    shared = [(i, names.index(name)) for i, name in enumerate(numeric.names) if name in names]
    mine, theirs = (list(places) for places in zip(*shared, strict=True))
    runs = []
    for run in found.runs:
        knobs = knobs_of(system, run.point)
        bound = numeric.bind(numeric.weights(knobs))
        values, rates = tabulate(bound, inputs, run.times, run.values[: numeric.n_states])
        values[mine], rates[mine] = run.values[theirs], run.rates[theirs]
        runs.append(Run(knobs, run.times, values, rates, run.point))
    low = np.min([r.values.min(axis=1) for r in runs], axis=0)
    high = np.max([r.values.max(axis=1) for r in runs], axis=0)
    low[mine], high[mine] = found.low[theirs], found.high[theirs]
    return replace(found, low=low, high=high, runs=tuple(runs))
