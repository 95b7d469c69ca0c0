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
        self.n_c = n_c = network.n_capacitors
        self.size = n_c + network.n_op_amps + network.n_multipliers
        self.poles = slice(n_c, self.size)
        self.products = slice(self.size - network.n_multipliers, self.size)
        self.x_rows = slice(self.size, self.size + network.n_multipliers)
        self.y_rows = slice(self.x_rows.stop, self.x_rows.stop + network.n_multipliers)
        self.sparse = not isinstance(network.rate, np.ndarray)

    def push(self, inputs: Array) -> Array:
        """What the inputs (sources' volts, then 1) add to the network's rows."""
        pushed: Array = self.network.rate_input @ inputs
        return pushed

    def rates(self, state: Array, push: Array, *, slewing: bool = True) -> Array:
        """Time derivative of the states, shape ``(n_states,)`` [V/s].

        Parameters
        ----------
        state
            Capacitor voltages and poles [V].
        push
            From :meth:`push`.
        slewing
            Whether slew limits hold.
        """
        net = self.network
        rows: Array = net.rate @ state
        rows += push
        if len(net.product):
            rows[self.products] += net.product * rows[self.x_rows] * rows[self.y_rows]
        drive, poles = rows[self.poles], state[self.poles]
        if slewing:
            drive /= net.slew
            np.tanh(drive, out=drive)
            drive *= net.slew
        drive -= net.leak * poles
        drive -= net.clamp * (poles - np.minimum(np.maximum(poles, net.low), net.high))
        return rows[: self.size]

    def jacobian(self, state: Array, push: Array, *, slewing: bool = True) -> Matrix:
        """Derivative of :meth:`rates` by the states, shape ``(n_states, n_states)``; CSC on large boards."""
        net, size = self.network, self.size
        rows: Array = net.rate @ state
        rows += push
        x, y = rows[self.x_rows] * net.product, rows[self.y_rows] * net.product
        slope, own, poles = np.ones(size), np.zeros(size), state[self.poles]
        own[self.poles] = net.leak + net.clamp * ((poles < net.low) | (poles > net.high))
        if slewing:
            rows[self.products] += x * rows[self.y_rows]
            slope[self.poles] = 1.0 - np.tanh(rows[self.poles] / net.slew) ** 2
        if self.sparse:
            return self._sparse_jacobian(slope, own, x, y)
        out = net.rate[:size].copy()
        if len(net.product):
            out[self.products] += y[:, None] * net.rate[self.x_rows] + x[:, None] * net.rate[self.y_rows]
        out *= slope[:, None]
        out.flat[:: size + 1] -= own
        return out

    def _sparse_jacobian(self, slope: Array, own: Array, x: Array, y: Array) -> Matrix:
        from scipy.sparse import csr_array, diags_array, vstack

        net, size = self.network, self.size
        out = net.rate[:size]
        if len(net.product):
            products = diags_array(y) @ net.rate[self.x_rows] + diags_array(x) @ net.rate[self.y_rows]
            out = out + vstack([csr_array((size - len(net.product), size)), products])
        return (diags_array(slope) @ out - diags_array(own)).tocsc()

    def unlimited(self) -> Matrix:
        """The Jacobian of a board without multipliers while no output is at its swing and nothing slews."""
        net, middle = self.network, np.zeros(self.size)
        middle[self.poles] = (net.low + net.high) / 2.0
        return self.jacobian(middle, self.push(np.zeros(net.rate_input.shape[1])), slewing=False)

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
        found is one that the board itself would settle to. Slew limits play no part in a point of rest, unless an
        output stands at its swing: there the drive is all that a limit leaves of it.
        """
        state, push = state.copy(), self.push(inputs)
        free = np.flatnonzero(~held)
        if not len(free):
            return state
        for step in (*_REST_STEPS, *[_REST_STEPS[-1]] * _REST_AGAIN):
            rate = self.rates(state, push, slewing=False)[free]
            slope = self.jacobian(state, push, slewing=False)
            state[free] += self._implicit(slope, free, rate, float(step))
        poles, net = state[self.poles], self.network
        if np.any((poles < net.low) | (poles > net.high)):
            for step in (*_REST_STEPS, *[_REST_STEPS[-1]] * _REST_AGAIN):
                rate = self.rates(state, push)[free]
                state[free] += self._implicit(self.jacobian(state, push), free, rate, float(step))
        return state

    def _implicit(self, slope: Matrix, free: NDArray[np.int_], rate: Array, step: float) -> Array:
        if not self.sparse:
            return np.linalg.solve(np.eye(len(free)) / step - slope[np.ix_(free, free)], rate)
        from scipy.sparse import eye_array
        from scipy.sparse.linalg import splu

        part = slope[:, free].tocsr()[free]
        return np.asarray(splu((eye_array(len(free)) / step - part).tocsc()).solve(rate))
