"""The board's equations of motion, and the points where it comes to rest.

Op amp:      dp/dt = slew*tanh(w_t*(v_plus - v_minus)/slew) - (w_t/A0)*p - w_t*max(0, p - high) + w_t*max(0, low - p)
Multiplier:  dm/dt = slew*tanh(w_m*((x1 - x2)*(y1 - y2)/scale + z - m)/slew), with the same clamp (its own w_m, +-limit)
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.check.layout import Matrix
from patchplan.check.network import Network

Array = NDArray[np.float64]

#: Pseudo-time steps of the search for rest [s]: from below the poles of op amps to beyond any time constant of a board.
_REST_STEPS = np.logspace(-8, 9, 18)
_REST_AGAIN = 3


class Model:
    """Rates and Jacobian of one network under given inputs.

    Parameters
    ----------
    network
        The nodal model.
    """

    def __init__(self, network: Network) -> None:
        self.network = network
        self.n_c = network.n_capacitors
        self.first_multiplier = network.n_op_amps
        self.n_poles = network.n_op_amps + network.n_multipliers
        self.x_rows = slice(self.n_c + self.n_poles, self.n_c + self.n_poles + network.n_multipliers)
        self.y_rows = slice(self.x_rows.stop, self.x_rows.stop + network.n_multipliers)
        self.sparse = not isinstance(network.rate, np.ndarray)

    def rates(self, state: Array, inputs: Array, *, slewing: bool = True) -> Array:
        """Time derivative of the states, shape ``(n_states,)`` [V/s].

        Parameters
        ----------
        state, inputs
            Capacitor voltages and poles [V]; sources' volts and 1.
        slewing
            Whether slew limits hold.
        """
        net, n_c = self.network, self.n_c
        rows = net.rate @ state + net.rate_input @ inputs
        drive = rows[n_c : n_c + self.n_poles]
        if len(net.product):
            drive[self.first_multiplier :] += net.product * rows[self.x_rows] * rows[self.y_rows]
        if slewing:
            drive = net.slew * np.tanh(drive / net.slew)
        poles = state[n_c:]
        beyond = poles - np.minimum(np.maximum(poles, net.low), net.high)
        rows[n_c : n_c + self.n_poles] = drive - net.leak * poles - net.clamp * beyond
        return np.asarray(rows[: n_c + self.n_poles])

    def jacobian(self, state: Array, inputs: Array, *, slewing: bool = True) -> Matrix:
        """Derivative of :meth:`rates` by the states, shape ``(n_states, n_states)``; CSC on large boards."""
        net, n_c, size = self.network, self.n_c, self.n_c + self.n_poles
        slope = np.ones(size)
        own = np.zeros(size)
        poles = state[n_c:]
        own[n_c:] = net.leak + net.clamp * ((poles < net.low) | (poles > net.high))
        rows = net.rate @ state + net.rate_input @ inputs
        x, y = rows[self.x_rows] * net.product, rows[self.y_rows] * net.product
        if slewing:
            drive = rows[n_c:size]
            drive[self.first_multiplier :] += x * rows[self.y_rows]
            slope[n_c:] = 1.0 - np.tanh(drive / net.slew) ** 2
        if self.sparse:
            return self._sparse_jacobian(slope, own, x, y)
        out = net.rate[:size].copy()
        if len(net.product):
            out[n_c + self.first_multiplier :] += (
                y[:, None] * net.rate[self.x_rows] + x[:, None] * net.rate[self.y_rows]
            )
        out *= slope[:, None]
        out.flat[:: size + 1] -= own
        return out

    def _sparse_jacobian(self, slope: Array, own: Array, x: Array, y: Array) -> Matrix:
        from scipy.sparse import csr_array, diags_array, vstack

        net, size = self.network, self.n_c + self.n_poles
        out = net.rate[:size]
        if len(net.product):
            products = diags_array(y) @ net.rate[self.x_rows] + diags_array(x) @ net.rate[self.y_rows]
            out = out + vstack([csr_array((size - len(net.product), size)), products])
        return (diags_array(slope) @ out - diags_array(own)).tocsc()

    def rest(self, state: Array, inputs: Array, held: NDArray[np.bool_]) -> Array:
        """Where the states come to rest while some of them are held, shape ``(n_states,)`` [V].

        Parameters
        ----------
        state
            Where the search begins.
        inputs
            Constant inputs.
        held
            States that keep their value.

        Notes
        -----
        Pseudo-transient continuation (Kelley and Keyes 1998): one implicit Euler step of each length, so that the point
        found is one that the board itself would settle to. Slew limits play no part in a point of rest.
        """
        state = state.copy()
        free = np.flatnonzero(~held)
        if not len(free):
            return state
        for step in (*_REST_STEPS, *[_REST_STEPS[-1]] * _REST_AGAIN):
            rate = self.rates(state, inputs, slewing=False)[free]
            slope = self.jacobian(state, inputs, slewing=False)
            state[free] += self._implicit(slope, free, rate, float(step))
        return state

    def _implicit(self, slope: Matrix, free: NDArray[np.int_], rate: Array, step: float) -> Array:
        if not self.sparse:
            return np.linalg.solve(np.eye(len(free)) / step - slope[np.ix_(free, free)], rate)
        from scipy.sparse import eye_array
        from scipy.sparse.linalg import splu

        part = slope[:, free].tocsr()[free]
        return np.asarray(splu((eye_array(len(free)) / step - part).tocsc()).solve(rate))
