"""The nominal run: the equation solved once, tightly, on a grid fine enough for linear interpolation."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.reach.collocation import Pieces
from patchplan.reach.curves import LINEAR_ERROR, linear_error, refined, resample
from patchplan.reach.field import Bound, Field
from patchplan.reach.inputs import MANY_EDGES, Inputs
from patchplan.reach.linear import Forcing, solve_linear
from patchplan.reach.solve import GrowsWithoutBoundError, floors, solve

Array = NDArray[np.float64]

#: Points of the grid, and how many numbers a table of all signals may hold.
LEAST_POINTS, MOST_POINTS, MOST_NUMBERS = 600, 20000, 4_000_000

#: Tolerances of the final pass (relative to each state's peak) and of the pass that finds the peaks.
_TIGHT, _LOOSE = 1e-12, 1e-6
#: Of the final pass where inputs have very many edges, as a recording's rows: a solver is slow across those.
_ROUGH_INPUT = 1e-9


def start_of(system: System) -> Array:
    """Start values, shape ``(n_states,)``."""
    return np.array([float(s.start) for s in system.states])


def point_limit(field: Field) -> int:
    """Most points of a grid on which every name is tabulated."""
    return int(min(MOST_POINTS, max(2 * LEAST_POINTS, MOST_NUMBERS // len(field.names))))


def uniform_grid(edges: Array, points: int) -> Array:
    """Grid of about so many points, each inner edge twice, at least 4 parts between edges."""
    pieces = []
    for begin, stop in pairwise(edges.tolist()):
        count = max(4, int(np.ceil(points * (stop - begin) / edges[-1])))
        pieces.append(np.linspace(begin, stop, count + 1))
    return np.concatenate(pieces)


def tabulate(field: Bound, inputs: Inputs, times: Array, states: Array) -> tuple[Array, Array]:
    """Values and rates of every name on a grid, shape ``(n_names, n_times)``."""
    u, slopes = inputs.on_grid(times)
    return field.all_values(states, u), field.all_rates(states, u, slopes)


def solve_nominal(system: System, field: Bound, inputs: Inputs) -> tuple[Array, Array, Array]:
    """Times, values and rates of every name over the run.

    Raises
    ------
    GrowsWithoutBoundError
        With the time.
    """
    most = point_limit(field.field)
    if system.is_linear and field.field.n_states:
        return _linear(system, field, inputs, most)
    start = start_of(system)
    times = uniform_grid(inputs.edges, LEAST_POINTS)
    rough = start[:, None] * np.ones_like(times)
    floor = 1e-9 * np.maximum(np.abs(start), np.abs(start).max(initial=0.0) * 1e-3 + 1e-12)
    for _ in range(3):
        rough = solve(field, start, inputs, times, tolerance=_LOOSE, floor=floor) if start.size else rough
        values, rates = tabulate(field, inputs, times, rough)
        error = linear_error(times, values, rates)
        times = refined(times, error, most=most)
        if error.max() < 1e-2 or len(times) > most / 2:
            break
    tight = _ROUGH_INPUT if len(inputs.edges) > MANY_EDGES else _TIGHT
    floor = floors(np.abs(rough).max(axis=1), tight)

    def states(times: Array) -> Array:
        return (
            solve(field, start, inputs, times, tolerance=tight, floor=floor)
            if start.size
            else np.zeros((0, times.size))
        )

    return _settled(field, inputs, times, states, most, resampled=True)


def _settled(
    field: Bound, inputs: Inputs, times: Array, states: Callable[[Array], Array], most: int, *, resampled: bool
) -> tuple[Array, Array, Array]:
    """Tabulate, and refine where linear interpolation still errs too much."""
    x = states(times)
    values, rates = tabulate(field, inputs, times, x)
    for _ in range(3):
        error = linear_error(times, values, rates)
        finer = refined(times, error, most=most, aim=LINEAR_ERROR)
        if len(finer) == len(times) or len(times) > most / 2:
            break
        n = field.field.n_states
        # The cubic's error is about a sixth of the square of the linear one.
        cubic = resampled and error.max() < 3e-4
        x = resample(times, values[:n], rates[:n], finer) if cubic else states(finer)
        times = finer
        values, rates = tabulate(field, inputs, times, x)
    return times, values, rates


def linear_parts(field: Bound) -> tuple[Any, Any, Array]:
    """A, B (sparse) and the constant of x' = A x + B u + c of a linear System."""
    n, m = field.field.n_states, field.field.n_sources
    zero, silent = np.zeros(n), np.zeros(m)
    both = field.linear_part(zero, silent)
    return both[:, :n], both[:, n:], field.rates(zero, silent)


def forcing_of(by_source: Any, constant: Array, inputs: Inputs) -> Forcing:
    """B u(t) + c as a function for `solve_linear`."""
    if not inputs.count:
        return lambda times, begin, stop: np.repeat(constant[:, None], times.size, axis=1)
    dense = by_source.toarray() if by_source.shape[0] * by_source.shape[1] < 10**5 else by_source
    column = constant[:, None]
    return lambda times, begin, stop: np.asarray(dense @ inputs.inside(times, begin, stop) + column)


def linear_pieces(system: System, field: Bound, inputs: Inputs) -> Pieces:
    """The solution of a linear System as polynomials.

    Raises
    ------
    GrowsWithoutBoundError
        With the time.
    """
    matrix, by_source, constant = linear_parts(field)
    try:
        return solve_linear(matrix, start_of(system), forcing_of(by_source, constant, inputs), inputs.edges)
    except FloatingPointError as error:
        raise GrowsWithoutBoundError(float(error.args[0])) from None


def _linear(system: System, field: Bound, inputs: Inputs, most: int) -> tuple[Array, Array, Array]:
    pieces = linear_pieces(system, field, inputs)
    times, _ = pieces.grid(pieces.parts(LINEAR_ERROR, most, LEAST_POINTS), inputs.edges)
    return _settled(field, inputs, times, pieces.at, most, resampled=False)
