"""Runs of boards without multipliers: exact in the state, by modes, with inputs as parabolas between rows.

A board is linear as long as no output is at its swing and no op amp comes near its slew rate; both are tested after the
run, and the run is given up where they do not hold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.check.drive import Stretch
from patchplan.check.model import Model

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

#: Modes are trusted where the condition of their vectors is below this.
_CONDITION = 1e6
#: Parabolas of the inputs must agree with them to this fraction of their peak; the grid is halved up to so many rows.
_INPUT_ERROR, _MOST_ROWS = 1e-6, 1 << 17
#: Share of the slew rate below which an op amp is linear: tanh(x) is x to 3e-3 there, and only the small input voltage
#: of the op amp bears that.
_SLEW_SHARE = 0.1
#: A mode that grows by more than exp(this) over a stretch ends at a rail.
_MOST_GROWTH = 60.0
#: Below this |z| the phi functions are summed as series, above it divided out; both keep 1e-13 there.
_SERIES_BELOW, _SERIES_TERMS = 1.0, 18


@dataclass(frozen=True)
class Modes:
    """Modes of a linear board: ``vectors @ diag(rates) @ inverse`` is its Jacobian."""

    model: Model
    rates: Complex
    vectors: Complex
    inverse: Complex

    def run(self, state: Array, times: Array, stretch: Stretch, tolerance: float) -> tuple[Array, str] | None:
        """States at ``times``, shape ``(n_times, n_states)``, and ""; None where the board is not linear over them.

        Parameters
        ----------
        state
            States at the first time [V].
        times
            Rising, without equal ones [circuit s].
        stretch
            The inputs between two jumps.
        tolerance
            Not needed: the run is exact.

        Notes
        -----
        Exponential integrator with phi functions (Hochbruck and Ostermann 2010), one step a row.
        """
        if self.rates.real.max() * (times[-1] - times[0]) > _MOST_GROWTH:
            return None
        grid = _grid(times, stretch)
        if grid is None:
            return None
        states = self._states(state, grid, stretch)
        if not stays_linear(self.model, states, stretch.over(grid)):
            return None
        return np.asarray(states[np.searchsorted(grid, times)]), ""

    def _states(self, state: Array, grid: Array, stretch: Stretch) -> Array:
        step = np.diff(grid)
        start, end = stretch.over(grid[:-1]), stretch.over(grid[1:])
        middle = stretch.over(grid[:-1] + step / 2)
        into = self.inverse @ self.model.network.rate_input[: self.model.size]
        z = self.rates[:, None] * step
        one, two, three = _phi(z)
        pushed = step * (
            one * (into @ start)
            + two * (into @ (4.0 * middle - 3.0 * start - end))
            + 2.0 * three * (into @ (2.0 * start - 4.0 * middle + 2.0 * end))
        )
        decay = np.exp(z)
        modes = np.empty((len(grid), len(self.rates)), complex)
        modes[0] = self.inverse @ state
        for row, (kept, added) in enumerate(zip(decay.T, pushed.T, strict=True)):
            modes[row + 1] = kept * modes[row] + added
        return np.asarray((modes @ self.vectors.T).real)


def stays_linear(model: Model, states: Array, inputs: Array) -> bool:
    """Whether no output of a run is at its swing and no op amp near its slew rate.

    Parameters
    ----------
    states, inputs
        Shapes ``(n_times, n_states)`` and ``(n_inputs, n_times)``.
    """
    net, poles = model.network, model.poles
    outputs = states[:, poles]
    if not np.isfinite(states).all() or (outputs > net.high).any() or (outputs < net.low).any():
        return False
    drive = net.rate[poles] @ states.T + net.rate_input[poles] @ inputs
    return bool((np.abs(drive) < _SLEW_SHARE * net.slew[:, None]).all())


def modes_of(model: Model) -> Modes | None:
    """Modes of a board without multipliers; None where it has some, or its modes are not to be trusted."""
    net = model.network
    if len(net.product) or not model.size:
        return None
    rates, vectors = np.linalg.eig(model.unlimited())
    if np.linalg.cond(vectors) > _CONDITION:
        return None
    return Modes(model, rates.astype(complex), vectors.astype(complex), np.linalg.inv(vectors).astype(complex))


def _grid(times: Array, stretch: Stretch) -> Array | None:
    """Rows fine enough for the inputs to be parabolas in between; None where that takes too many."""
    knots = stretch.knots
    grid = np.unique(np.concatenate([times, knots[(knots > times[0]) & (knots < times[-1])]]))
    if stretch.constant:
        return grid
    while len(grid) < _MOST_ROWS:
        step = np.diff(grid)
        at = [stretch.over(grid[:-1] + step * share) for share in (0.0, 0.25, 0.5, 1.0)]
        parabola = 0.375 * at[0] + 0.75 * at[2] - 0.125 * at[3]
        if np.abs(parabola - at[1]).max() <= _INPUT_ERROR * np.abs(at[0][:-1]).max():
            return grid
        grid = np.sort(np.concatenate([grid, grid[:-1] + step / 2]))
    return None


def _phi(z: Complex) -> tuple[Complex, Complex, Complex]:
    """phi_1, phi_2, phi_3 of ``z``: integrals of exp(z (1 - s)) s^j / j! over s from 0 to 1."""
    small: NDArray[np.bool_] = np.abs(z) < _SERIES_BELOW
    divisor = np.where(small, 1.0, z)
    one = (np.exp(z) - 1.0) / divisor
    two = (one - 1.0) / divisor
    three = (two - 0.5) / divisor
    near = np.where(small, z, 0.0)
    series = np.zeros_like(z)
    for term in range(_SERIES_TERMS, 0, -1):
        series = series * near / (term + 3) + 1.0
    three = np.where(small, series / 6.0, three)
    two = np.where(small, near * three + 0.5, two)
    return (
        np.asarray(np.where(small, near * two + 1.0, one), complex),
        np.asarray(two, complex),
        np.asarray(three, complex),
    )
