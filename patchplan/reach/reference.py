"""Find the Reference and the range of every signal of a System."""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.problem import Build
from patchplan.equation.system import System
from patchplan.reach.curves import extremes
from patchplan.reach.field import Field, field_of
from patchplan.reach.inputs import Inputs
from patchplan.reach.nominal import solve_nominal
from patchplan.reach.records import Range, Reach, Reference, Run
from patchplan.reach.search import coarse_grid, search_box, spread_of_boards
from patchplan.reach.solve import GrowsWithoutBoundError, grows_without_bound

Array = NDArray[np.float64]


def find_reach(system: System, stated: Mapping[str, tuple[Fraction, Fraction]], build: Build) -> Reach:
    """Solve the problem as written and find how far every state, source and signal goes.

    Parameters
    ----------
    system
        The explicit equations.
    stated
        Ranges that the problem file states; they win, a run that exceeds one is a warning.
    build
        Tolerances of the parts, for the margin of simulated ranges.

    Raises
    ------
    ProblemFaults
        The solution grows without bound within the run.
    """
    field = field_of(system)
    try:
        return _with_stated(_reach(system, field, build), stated)
    except GrowsWithoutBoundError as error:
        raise grows_without_bound(error.time) from None


def _reach(system: System, field: Field, build: Build) -> Reach:
    inputs = Inputs(system)
    knobs = system.knob_values()
    times, values, rates = solve_nominal(system, field.bind(field.weights(knobs)), inputs)
    reference = Reference(field.names, times, values, rates, tuple(inputs.edges[1:-1].tolist()))
    nominal = Run(knobs, times, values, rates)
    low, high = extremes(times, values, rates)
    if system.is_linear and not system.adjustable:
        reason = "exact solution of linear equations with known inputs"
        found = {
            n: Range(n, float(a), float(b), "proved", 0.0, reason)
            for n, a, b in zip(field.names, low, high, strict=True)
        }
        return Reach(reference, found, (nominal,))
    return _simulated(system, field, build, inputs, reference, nominal, (low, high))


def _simulated(
    system: System,
    field: Field,
    build: Build,
    inputs: Inputs,
    reference: Reference,
    nominal: Run,
    ends: tuple[Array, Array],
) -> Reach:
    grid = coarse_grid(inputs, reference.times)
    peaks = np.abs(reference.values[: field.n_states]).max(axis=1)
    boards = spread_of_boards(system, field, build, inputs, grid, peaks)
    below, above = np.maximum(ends[0] - boards.low, 0.0), np.maximum(boards.high - ends[1], 0.0)
    low, high = ends
    runs = (nominal,)
    what = "simulated; the margin is how far boards with parts within tolerance go beyond the nominal one"
    if system.adjustable:
        box = search_box(system, field, inputs, grid, peaks)
        low, high, runs = np.minimum(low, box.low), np.maximum(high, box.high), (nominal, *box.runs)
        what = "simulated over corners and a sample of the adjustable parameters; " + what.partition("; ")[2]
    known = {s.name for s in system.sources}
    found = {}
    for i, name in enumerate(field.names):
        if name in known:
            found[name] = Range(name, float(low[i]), float(high[i]), "proved", 0.0, "known function of time")
        else:
            margin = float(max(below[i], above[i]))
            found[name] = Range(name, float(low[i] - below[i]), float(high[i] + above[i]), "simulated", margin, what)
    return Reach(reference, found, runs, boards.warnings)


def _with_stated(reach: Reach, stated: Mapping[str, tuple[Fraction, Fraction]]) -> Reach:
    ranges, warnings = dict(reach.ranges), list(reach.warnings)
    for name, (low, high) in stated.items():
        if name not in ranges:
            continue
        found = ranges[name]
        ranges[name] = Range(name, float(low), float(high), "stated", 0.0, "stated in the problem file")
        slack = 1e-9 * float(high - low)
        if found.low < low - slack or found.high > high + slack:
            warnings.append(
                f"{name} is stated to stay within {float(low):.6g} to {float(high):.6g}, "
                f"but reaches {found.low:.6g} to {found.high:.6g} ({found.known_by})."
            )
    return Reach(reach.reference, ranges, reach.runs, tuple(warnings))
