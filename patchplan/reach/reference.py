"""Find the Reference and the range of every signal of a System."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.problem import Build
from patchplan.equation.system import System
from patchplan.reach.bounded_box import search_bounded
from patchplan.reach.bounds import bounded_of, ends_of, free_sources
from patchplan.reach.box import search_boxes
from patchplan.reach.curves import extremes
from patchplan.reach.field import Field, field_of
from patchplan.reach.free import search_waveforms
from patchplan.reach.free_box import search_free_box
from patchplan.reach.inputs import Inputs, Stored
from patchplan.reach.length import check_length
from patchplan.reach.nominal import solve_nominal
from patchplan.reach.records import Bounded, Box, Range, Reach, Reference, Run
from patchplan.reach.search import coarse_grid, spread_of_boards
from patchplan.reach.solve import GrowsWithoutBoundError, grows_without_bound
from patchplan.reach.worst import driven, worst_cases

Array = NDArray[np.float64]

#: A signal beyond this many units is no signal any more.
_BEYOND = 1e60
#: A signal that stays within a stated range after this part of the run is outside it only at first.
_FIRST_MOMENTS = 0.1
_EXACT = "exact solution of linear equations with known inputs"
_GAIN = "half the width of each input's bounds times the peak gain over the run, around the response to their middle"
_ESTIMATED = "the error of the impulse responses is estimated, not bounded"
_BOARDS = "the margin is how far boards with parts within tolerance go beyond the nominal one"
_BOX = "simulated over corners and a Sobol sample of the adjustable and uncertain parameters"
_SEARCHED = (
    "simulated with the worst input waveforms that a search found; other waveforms within the bounds may go further"
)


@dataclass(frozen=True)
class _Ends:
    """Lowest and highest value of every name so far, margins beyond them, how known, and the runs behind them."""

    low: Array
    high: Array
    known_by: str
    reason: str
    below: Array | float = 0.0
    above: Array | float = 0.0
    runs: tuple[Run, ...] = ()
    warnings: tuple[str, ...] = field(default=())
    box: Box | None = None


def find_reach(
    system: System,
    stated: Mapping[str, tuple[Fraction, Fraction]],
    build: Build,
    *,
    uncertain: System | None = None,
) -> Reach:
    """Solve the problem as written and find how far every state, source and signal goes.

    Parameters
    ----------
    system
        The explicit equations.
    stated
        Ranges that the problem file states; they win, a run that exceeds one is a warning.
    build
        Tolerances of the parts, for the margin of simulated ranges.
    uncertain
        The equations with uncertain parameters left open within their tolerance; None where there are none.

    Raises
    ------
    ProblemFaults
        The solution grows without bound within the run, or the run holds too many cycles.
    """
    numeric = field_of(system)
    check_length(system, numeric)
    try:
        return _with_stated(_reach(system, numeric, build, uncertain), stated)
    except GrowsWithoutBoundError as error:
        raise grows_without_bound(error) from None


def _reach(system: System, numeric: Field, build: Build, uncertain: System | None) -> Reach:
    if free_sources(system) and system.is_linear:
        return _linear_worst(system, numeric, uncertain)
    knobs = system.knob_values()
    bound = numeric.bind(numeric.weights(knobs))
    waveforms: tuple[dict[str, Stored], ...] = ()
    worst: _Ends | None = None
    if free_sources(system):
        middle = solve_nominal(system, bound, Inputs(system))
        worst, waveforms = _searched_worst(system, numeric, middle)
    stand_ins = waveforms[0] if waveforms else {}
    inputs = Inputs(system, stand_ins)
    times, values, rates = solve_nominal(system, bound, inputs)
    reference = Reference(numeric.names, times, values, rates, tuple(inputs.edges[1:-1].tolist()), stand_ins)
    nominal = Run(knobs, times, values, rates)
    _check_size(times, values)
    low, high = extremes(times, values, rates)
    ends = _Ends(low, high, "proved", _EXACT)
    if worst is not None:
        ends = replace(worst, low=np.minimum(low, worst.low), high=np.maximum(high, worst.high))
    if not system.is_linear or system.adjustable or uncertain is not None:
        ends = _simulated(system, numeric, build, inputs, nominal, ends, uncertain, waveforms)
    return Reach(reference, _ranges(system, numeric, ends), (nominal, *ends.runs), ends.warnings, box=ends.box)


def _check_size(times: Array, values: Array) -> None:
    if np.abs(values).max(initial=0.0) > _BEYOND:
        raise GrowsWithoutBoundError(float(times[np.argmax(np.abs(values).max(axis=0) > _BEYOND)]))


def _linear_worst(system: System, numeric: Field, uncertain: System | None) -> Reach:
    """Ranges under every waveform within the bounds, and the runs with the worst of them."""
    knobs = system.knob_values()
    bound = numeric.bind(numeric.weights(knobs))
    bounded = [bounded_of(system, bound, knobs)]
    _check_size(bounded[0].middle.times, bounded[0].middle.values)
    found = ends_of(bounded[0], bounded[0].rows)
    cases = worst_cases(system, bound, bounded[0], found)
    known = "proved" if found.proved else "simulated"
    ends = _Ends(found.low, found.high, known, _GAIN if found.proved else f"{_GAIN}; {_ESTIMATED}")
    if system.adjustable or uncertain is not None:
        ends, more = _linear_box(system, numeric, ends, uncertain)
        bounded += more
    reference = cases[0].reference
    nominal = Run(knobs, reference.times, reference.values, reference.rates)
    return Reach(reference, _ranges(system, numeric, ends), (nominal,), cases[0].said, tuple(bounded), cases, ends.box)


def _searched_worst(
    system: System, numeric: Field, middle: tuple[Array, Array, Array]
) -> tuple[_Ends, tuple[dict[str, Stored], ...]]:
    bound, duration = numeric.bind(numeric.weights(system.knob_values())), float(system.duration)
    peaks = np.abs(middle[1][: numeric.n_states]).max(axis=1)
    for end in (-1.0, 1.0):
        levels = {n: (np.array([0.0, duration]), np.full(2, mid + end * half)) for n, mid, half in free_sources(system)}
        steady = solve_nominal(system, bound, Inputs(system, levels))
        peaks = np.maximum(peaks, np.abs(steady[1][: numeric.n_states]).max(axis=1))
    found = search_waveforms(system, numeric, bound.weights, peaks)
    how = f"the worst case for {system.watch[0][0]} that a search found" if system.watch else "what a search found"
    said = tuple(driven(name, how, waveform) for name, waveform in found.stand_ins[0].items())
    return _Ends(found.low, found.high, "simulated", _SEARCHED, warnings=said), found.stand_ins


def _simulated(
    system: System, numeric: Field, build: Build, inputs: Inputs, nominal: Run, ends: _Ends, uncertain: System | None,
    waveforms: tuple[dict[str, Stored], ...],
) -> _Ends:  # fmt: skip
    """Widen by the box of the parameters and by boards within tolerance."""
    grid = coarse_grid(system, numeric, inputs, nominal.times)
    peaks = np.abs(nominal.values[: numeric.n_states]).max(axis=1)
    boards = spread_of_boards(system, numeric, build, inputs, grid, peaks)
    alone = extremes(nominal.times, nominal.values, nominal.rates)
    below, above = np.maximum(alone[0] - boards.low, 0.0), np.maximum(boards.high - alone[1], 0.0)
    how = [ends.reason] if ends.known_by == "simulated" else []
    found = replace(ends, known_by="simulated", below=below, above=above, warnings=(*ends.warnings, *boards.warnings))
    if system.adjustable or uncertain is not None:
        if waveforms:
            box = search_free_box(system, numeric, uncertain, waveforms, nominal.times, peaks)
        else:
            box = search_boxes(system, numeric, uncertain, inputs, grid, peaks)
        found = replace(
            found, low=np.minimum(ends.low, box.low), high=np.maximum(ends.high, box.high), runs=box.runs, box=box.box,
            warnings=(*found.warnings, *box.warnings),
        )  # fmt: skip
        how.append(_BOX)
    return replace(found, reason="; ".join([*(how or ["simulated"]), _BOARDS]))


def _linear_box(system: System, numeric: Field, ends: _Ends, uncertain: System | None) -> tuple[_Ends, list[Bounded]]:
    """Widen by peak gains over the box of the parameters."""
    found, low, high, box = search_bounded(system, numeric, uncertain or system)
    reason = f"{_BOX}; at each, {_GAIN}; {_ESTIMATED}"
    return _Ends(np.minimum(ends.low, low), np.maximum(ends.high, high), "simulated", reason, box=box), found


def _ranges(system: System, numeric: Field, ends: _Ends) -> dict[str, Range]:
    below, above = (np.broadcast_to(x, ends.low.shape) for x in (ends.below, ends.above))
    found = {}
    for i, name in enumerate(numeric.names):
        low, high = float(ends.low[i] - below[i]), float(ends.high[i] + above[i])
        found[name] = Range(name, low, high, ends.known_by, float(max(below[i], above[i])), ends.reason)
    for i, source in enumerate(system.sources, start=numeric.n_states):
        if source.waveform is None and source.within is not None:
            low, high = (float(x) for x in source.within)
            found[source.name] = Range(source.name, low, high, "proved", 0.0, "bounds given in the problem file")
        else:
            known = float(ends.low[i]), float(ends.high[i])
            found[source.name] = Range(source.name, *known, "proved", 0.0, "known function of time")
    return found


def _with_stated(reach: Reach, stated: Mapping[str, tuple[Fraction, Fraction]]) -> Reach:
    ranges, warnings = dict(reach.ranges), list(reach.warnings)
    for name, (low, high) in stated.items():
        if name not in ranges:
            continue
        found = ranges[name]
        ranges[name] = Range(name, float(low), float(high), "stated", 0.0, "stated in the problem file")
        slack = Fraction(float(high - low) * 1e-9)
        if found.low < low - slack or found.high > high + slack:
            warnings.append(
                f"{name} is stated to stay within {float(low):.6g} to {float(high):.6g}, "
                f"but reaches {found.low:.6g} to {found.high:.6g} ({found.known_by})."
                f"{_at_first(reach, name, float(low - slack), float(high + slack))}"
            )
    return replace(reach, ranges=ranges, warnings=tuple(warnings))


def _at_first(reach: Reach, name: str, low: float, high: float) -> str:
    """A sentence where the nominal run leaves a stated range at its beginning only."""
    run = reach.runs[0]
    values = run.values[reach.reference.names.index(name)]
    outside = run.times[(values < low) | (values > high)]
    if not outside.size or outside[-1] > _FIRST_MOMENTS * run.times[-1]:
        return ""
    return f" It is outside only at first, from t = {outside[0]:.4g} to {outside[-1]:.4g}."
