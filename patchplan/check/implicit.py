"""Runs of large boards without multipliers: one sparse implicit run of the linear model, op amps' poles included.

The slow manifold of finite gain and bandwidth is what an L-stable method follows of itself once an op amp's own pole,
far faster than any signal, has died away; so the poles stay in, and no approximation is made.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.check.drive import Stretch
from patchplan.check.layout import Matrix
from patchplan.check.linear import stays_linear
from patchplan.check.model import Model
from patchplan.reach.linear import solve_linear

Array = NDArray[np.float64]

#: Above this many states a board whose outputs clip is not followed through it: step by step that takes minutes, and an
#: overload it is in any case.
MOST_CLIPPED = 300
#: A linear run ends this many times beyond the swing of the op amps.
_FAR_BEYOND = 10.0


@dataclass(frozen=True)
class Implicit:
    """A large linear board: ``matrix`` is its Jacobian, sparse."""

    model: Model
    matrix: Matrix

    def run(self, state: Array, times: Array, stretch: Stretch, tolerance: float) -> tuple[Array, str] | None:
        """States at ``times``, shape ``(n_times, n_states)``; None where the board is not linear over the stretch.

        A very large board is not followed beyond the first output at its swing: fewer rows, and a sentence.

        Parameters
        ----------
        state
            States at the first time [V].
        times
            Rising, without equal ones [circuit s].
        stretch
            The inputs between two jumps.
        tolerance
            Error allowed inside a step as a part of each state's peak.

        Notes
        -----
        Radau collocation of order 9 (Hairer and Wanner 1996, section IV.5).
        """
        net = self.model.network
        into = net.rate_input[: self.model.size]
        knots = stretch.knots
        edges = np.concatenate([times[:1], knots[(knots > times[0]) & (knots < times[-1])], times[-1:]])
        pieces = solve_linear(
            self.matrix,
            state,
            lambda at, *_: into @ stretch.over(at),
            edges,
            tolerance=tolerance,
            largest=_FAR_BEYOND * float(max(net.high.max(), -net.low.min())),
        )
        reached = float(pieces.starts[-1] + pieces.lengths[-1])
        known = len(times) if reached >= times[-1] * (1 - 1e-12) else int(np.searchsorted(times, reached))
        states = pieces.at(times[:known]).T
        outputs = states[:, self.model.poles]
        beyond = np.flatnonzero(((outputs > net.high) | (outputs < net.low)).any(axis=1))
        good = int(beyond[0]) if beyond.size else known
        if good == len(times) and stays_linear(self.model, states, stretch.over(times)):
            return states, ""
        if self.model.size <= MOST_CLIPPED or not stays_linear(self.model, states[:good], stretch.over(times[:good])):
            return None
        # The row at which an output is beyond its swing shows which one it is.
        return states[: good + 1], (
            f"An output reaches its swing at {times[min(good, known - 1)]:.4g} s of circuit time; a board of "
            f"{self.model.size} capacitors and op amps is not followed beyond that."
        )


def implicit_of(model: Model) -> Implicit | None:
    """The run of a board without multipliers; None where it has some."""
    if len(model.network.product):
        return None
    return Implicit(model, model.unlimited())
