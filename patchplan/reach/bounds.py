"""Worst case of linear equations whose inputs are known only by bounds: peak gains over the run."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.reach.curves import LINEAR_ERROR, linear_error
from patchplan.reach.field import Bound
from patchplan.reach.inputs import Stored
from patchplan.reach.linear import solve_linear
from patchplan.reach.nominal import LEAST_POINTS, linear_parts, point_limit
from patchplan.reach.solve import GrowsWithoutBoundError

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Impulse:
    """Response of every name to an impulse of one source.

    Attributes
    ----------
    times, values
        Shapes ``(n_times,)`` and ``(n_names, n_times)``: without the direct part.
    direct
        Shape ``(n_names,)``: what follows the source at once.
    """

    times: Array
    values: Array
    rates: Array
    direct: Array

    def moves(self, row: int) -> bool:
        """Whether one name follows the source at all."""
        return bool(self.direct[row] or self.values[row].any())

    def gain(self) -> Array:
        """Integral of the magnitude from 0 to each time, ``(n_names, n_times)``, with direct part and quadrature error.

        The peak gain is the L1 norm of the impulse response: Boyd & Barratt 1991, Linear Controller Design, chapter 5.
        """
        fine = _magnitudes(self.times, self.values, self.rates)
        rough = _magnitudes(self.times[::2], self.values[:, ::2], self.rates[:, ::2])
        # Halving the step shows the error of the coarser grid, which is larger than that of the finer one.
        error = np.abs(fine[:, ::2] - rough).max(axis=1, initial=0.0)
        out: Array = fine + error[:, None] + np.abs(self.direct)[:, None]
        return out


def _magnitudes(times: Array, values: Array, rates: Array) -> Array:
    """Integral of |curve| from the first time to each, by cubics; cells with a sign change by their two triangles."""
    h = np.diff(times)
    a, b = values[:, :-1], values[:, 1:]
    whole = np.abs(h * (a + b) / 2 + h * h * (rates[:, :-1] - rates[:, 1:]) / 12)
    size = np.abs(a) + np.abs(b)
    triangles = h * (a * a + b * b) / (2 * np.where(size > 0, size, 1.0))
    cells = np.where(a * b < 0, triangles, whole)
    return np.concatenate((np.zeros((len(values), 1)), np.cumsum(cells, axis=1)), axis=1)


def impulse(system: System, field: Bound, source: str) -> Impulse:
    """Response of every name to an impulse of one source of a linear System.

    Raises
    ------
    GrowsWithoutBoundError
        With the time.
    """
    n, names = field.field.n_states, field.field.names
    matrix, by_source, _ = linear_parts(field)
    signals = field.derivatives(np.zeros(n), np.zeros(field.field.n_sources))[1]
    place = names.index(source)
    column = by_source[:, [place - n]].toarray()[:, 0]
    edges = np.array([0.0, float(system.duration)])
    try:
        pieces = solve_linear(matrix, column, None, edges)
    except FloatingPointError as error:
        raise GrowsWithoutBoundError(float(error.args[0])) from None
    limit = point_limit(field.field)
    times, states = pieces.grid(pieces.parts(LINEAR_ERROR / 10, limit, LEAST_POINTS), edges)
    values, rates = np.zeros((2, len(names), times.size))
    values[:n], rates[:n] = states, matrix @ states
    first_signal = n + field.field.n_sources
    values[first_signal:], rates[first_signal:] = signals[:, :n] @ values[:n], signals[:, :n] @ rates[:n]
    direct = np.zeros(len(names))
    direct[place] = 1.0
    direct[first_signal:] = signals[:, [place]].toarray()[:, 0]
    return Impulse(times, values, rates, direct)


def free_sources(system: System) -> list[tuple[str, float, float]]:
    """Name, middle and half width of every input known only by its bounds."""
    found = []
    for s in system.sources:
        if s.waveform is None and s.within is not None:
            low, high = (float(x) for x in s.within)
            found.append((s.name, (low + high) / 2, (high - low) / 2))
    return found


def worst_case(middle: tuple[Array, Array, Array], impulses: list[Impulse], halves: list[float]) -> tuple[Array, Array]:
    """Bounds of every name that hold for every waveform: the run with inputs at their middle, plus half width * gain.

    Parameters
    ----------
    middle
        Times, values and rates of the run with every free input at the middle of its bounds.

    Returns
    -------
    low, high
        Shape ``(n_names,)``.
    """
    times, values, rates = middle
    around = np.zeros_like(values)
    for response, half in zip(impulses, halves, strict=True):
        gain = response.gain()
        # The gain only grows, so its value at the next row of its own grid and of the run's bounds the whole cell.
        later = np.minimum(np.searchsorted(response.times, np.append(times[1:], times[-1])), len(response.times) - 1)
        around += half * gain[:, later]
    slack = linear_error(times, values, rates).max(initial=0.0) * np.abs(values).max(axis=1)
    moving = np.ptp(values, axis=1) > 0
    slack = np.where(moving, slack, 0.0)
    return (values - around).min(axis=1) - slack, (values + around).max(axis=1) + slack


def worst_waveform(
    response: Impulse, name_row: int, middle: float, half: float, sign: float, duration: float
) -> Stored:
    """The waveform inside its bounds that drives one signal furthest at the end of the run: the sign of h(T - t)."""
    h = response.values[name_row]
    peak = np.abs(h).max()
    if not peak:
        level = np.full(2, middle + half * sign * np.sign(response.direct[name_row]))
        return np.array([0.0, duration]), level
    counted = np.flatnonzero(np.abs(h) > 1e-6 * peak)
    signs, at = np.sign(h[counted]), response.times[counted]
    turns = np.flatnonzero(signs[1:] != signs[:-1])
    left, right = counted[turns], counted[turns + 1]
    share = np.abs(h[left]) / (np.abs(h[left]) + np.abs(h[right]))
    crossings = at[turns] + share * (at[turns + 1] - at[turns])
    switches = duration - crossings[::-1]
    levels = (
        middle + half * sign * np.append(signs[turns + 1][::-1], signs[0])
        if turns.size
        else np.array([middle + half * sign * signs[0]])
    )
    times = np.concatenate(([0.0], np.repeat(switches, 2), [duration]))
    return times, np.repeat(levels, 2)
