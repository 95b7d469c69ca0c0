"""Numerical solution of any System: one run exactly, or many runs at once."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.errors import Fault, ProblemFaults
from patchplan.reach.field import DENSE_LIMIT, Bound
from patchplan.reach.inputs import MANY_EDGES, Inputs
from patchplan.reach.rows import solve_rows

Array = NDArray[np.float64]

#: Steps allowed between two rows of the grid before a run counts as stuck.
_STEPS = 20000


class GrowsWithoutBoundError(Exception):
    """A run left every bound, or could not be carried on, at ``time``; ``point`` has the parameters moved for it."""

    def __init__(self, time: float, point: Mapping[str, float] | None = None) -> None:
        super().__init__(time)
        self.time, self.point = time, point or {}


def grows_without_bound(error: GrowsWithoutBoundError) -> ProblemFaults:
    """The error for a problem whose solution ends before its run does."""
    setting = ", ".join(f"{name} = {value:.6g}" for name, value in error.point.items())
    if setting:
        remedy = "Narrow the range of an adjustable parameter so that it stays clear of this, or shorten the duration."
        return ProblemFaults(
            [Fault(f"The solution grows without bound at t = {error.time:.4g} where {setting}.", remedy, "duration")]
        )
    return ProblemFaults(
        [
            Fault(
                f"The solution grows without bound at t = {error.time:.4g}.",
                "Shorten the duration, or check signs, parameters and start values.",
                "duration",
            )
        ]
    )


def floors(peaks: Array, tolerance: float) -> Array:
    """Absolute tolerance for each state: a part of its peak; a state that never moves takes it from the others."""
    largest = float(peaks.max(initial=0.0)) or 1e-6
    out: Array = tolerance * (peaks + 1e-6 * largest)
    return out


def solve(field: Bound, start: Array, inputs: Inputs, times: Array, *, tolerance: float, floor: Array) -> Array:
    """States on a grid in which every edge of the inputs appears twice (before, after) except the ends.

    Parameters
    ----------
    field
        One run: weights of shape ``(n_terms,)``; or m runs: ``(n_terms, m)``.
    start
        Shape ``(n,)`` or ``(n, m)``.
    tolerance, floor
        Relative tolerance of a step, and the absolute one: a number or shape ``(n,)``.

    Returns
    -------
    Array
        Shape ``(n, n_times)`` or ``(n, m, n_times)``.

    Raises
    ------
    GrowsWithoutBoundError
        With the time at which the run could not be carried on.
    """
    if len(inputs.edges) > MANY_EDGES and start.shape[0] <= DENSE_LIMIT:
        states = solve_rows(field, start, inputs, times, tolerance=tolerance, floor=floor)
        if states is not None:
            return states
    x = start
    parts = []
    for begin, stop in pairwise(inputs.restarts.tolist()):
        # From the second of the two equal times at its begin to the first of those at its stop.
        first, last = np.searchsorted(times, begin, side="right") - 1, np.searchsorted(times, stop, side="left")
        here, copies = np.unique(times[first : last + 1], return_counts=True)
        rows = _stretch(field, x, inputs, here, (begin, stop), tolerance, floor)
        parts.append(np.repeat(rows, copies, axis=-1))
        x = rows[..., -1]
    return np.concatenate(parts, axis=-1)


def _stretch(
    field: Bound, start: Array, inputs: Inputs, times: Array, ends: tuple[float, float], tolerance: float, floor: Array
) -> Array:
    if start.shape[0] > DENSE_LIMIT:
        return _sparse_stretch(field, start, inputs, times, ends, tolerance, floor)
    from scipy import integrate

    # The stubs know no tolerance for each component.
    odeint: Any = integrate.odeint
    depth, count = inputs.edge_depth, field.field.n_sources
    low, high = ends[0] + depth, ends[1] - depth
    shape = start.T.shape

    def sources(t: float) -> Array | None:
        return inputs.at(min(max(t, low), high)) if count else None

    def single(t: float, x: Array) -> Array:
        return field.rates(x, sources(t))

    def many(t: float, x: Array) -> Array:
        u = sources(t)
        return field.rates(x.reshape(shape).T, None if u is None else u.reshape(count, -1)).T.ravel()

    band = start.shape[0] - 1
    options: dict[str, Any] = {"ml": band, "mu": band} if start.ndim == 2 else {}
    floors = np.broadcast_to(floor, (start.shape[0],))

    def run(x: Array, times: Array) -> tuple[Array, bool, Array]:
        with warnings.catch_warnings(), np.errstate(over="ignore", invalid="ignore"):
            # A failed run is reported with its time instead.
            warnings.simplefilter("ignore")
            rows, info = odeint(
                single if start.ndim == 1 else many,
                x,
                times,
                rtol=tolerance,
                atol=np.tile(floors, start.size // start.shape[0]),
                tfirst=True,
                full_output=True,
                mxstep=_STEPS,
                hmax=(ends[1] - ends[0]) / 20,
                **options,
            )
        return rows, info["message"] == "Integration successful." and bool(np.isfinite(rows).all()), info["tcur"]

    rows, success, reached = run(start.T.ravel(), times)
    if not success:
        raise GrowsWithoutBoundError(_end_of_run(run, times, rows, reached))
    states: Array = rows.reshape(-1, *shape).transpose(2, 1, 0) if start.ndim == 2 else rows.T
    return states


def _end_of_run(
    run: Callable[[Array, Array], tuple[Array, bool, Array]], times: Array, rows: Array, reached: Array
) -> float:
    """The time at which a run ends, by running its last interval again on finer and finer grids."""
    last = 0
    for _ in range(3):
        passed = (reached >= times[1:]) & np.isfinite(rows[1:]).all(axis=1)
        last = int(np.argmin(passed))
        start, times = rows[last], np.linspace(times[last], times[last + 1], 17)
        rows, success, reached = run(start, times)
        if success:
            return float(times[-1])
    return float(times[0])


def _sparse_stretch(
    field: Bound, start: Array, inputs: Inputs, times: Array, ends: tuple[float, float], tolerance: float, floor: Array
) -> Array:
    """Many states: an implicit method of order 5 with the sparse Jacobian, one run after the other."""
    if start.ndim == 2:
        runs = [field.field.bind(field.weights[:, j]) for j in range(start.shape[1])]
        solved = [_sparse_stretch(f, start[:, j], inputs, times, ends, tolerance, floor) for j, f in enumerate(runs)]
        return np.stack(solved, axis=1)
    from scipy.integrate import solve_ivp

    low, high = ends[0] + inputs.edge_depth, ends[1] - inputs.edge_depth

    def sources(t: float) -> Array | None:
        return inputs.at(min(max(t, low), high)) if field.field.n_sources else None

    with np.errstate(over="ignore", invalid="ignore"):
        found = solve_ivp(
            lambda t, x: field.rates(x, sources(t)),
            (times[0], times[-1]),
            start,
            method="Radau",
            t_eval=times,
            rtol=max(tolerance, 1e-10),
            atol=floor,
            jac=lambda t, x: field.jacobian(x, sources(t)),
        )
    if not found.success or not np.isfinite(found.y).all():
        raise GrowsWithoutBoundError(float(found.t[-1]) if found.t.size else float(times[0]))
    states: Array = found.y
    return states
