"""Runs driven by inputs with very many edges, as a recording has: one or few collocation steps between edges."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.collocation import STAGES, radau, step_points, weights_at
from patchplan.reach.field import Bound
from patchplan.reach.inputs import Inputs

Array = NDArray[np.float64]

#: Iterations of one step, and halvings of a stretch before the run counts as stiff.
_ITERATIONS, _HALVINGS = 12, 8


def solve_rows(
    field: Bound, start: Array, inputs: Inputs, times: Array, *, tolerance: float, floor: Array
) -> Array | None:
    """States on a grid by Radau collocation of order 9, its equations solved by plain iteration.

    A multistep solver has to start anew at every edge; here each stretch is a step. Plain iteration converges only for
    steps below the fastest time constant, so stiff runs are handed back.

    Parameters
    ----------
    field, start, times
        As for `solve`: states of shape ``(n,)`` or ``(n, m)``; every inner edge stands twice in ``times``.
    tolerance, floor
        Relative and absolute error allowed in a step.

    Returns
    -------
    Array or None
        Shape ``(n, n_times)`` or ``(n, m, n_times)``; None where the run is stiff or leaves the floats.
    """
    runs = field.weights.shape[1] if start.ndim == 2 else 1
    weights = np.repeat(field.weights.reshape(-1, runs), STAGES + 1, axis=1) if start.ndim == 2 else field.weights
    stepper = _Stepper(field.field.bind(weights), inputs, runs, tolerance)
    x = start.reshape(len(start), runs)
    peak = np.abs(x) + np.reshape(np.broadcast_to(floor, len(start)), (-1, 1)) / tolerance
    out = np.empty((times.size, *x.shape))
    done = 0
    with np.errstate(over="ignore", invalid="ignore"):
        for begin, stop in pairwise(inputs.edges.tolist()):
            index, level = 0, 0
            while index < 2**level:
                h = (stop - begin) / 2**level
                t = begin + index * h
                piece = stepper.step(t, h, (begin, stop), x, peak)
                if piece is None:
                    level, index = level + 1, 2 * index
                    if level > _HALVINGS:
                        return None
                    continue
                index += 1
                last = index == 2**level
                # The first of two equal times belongs to this stretch, the second to the next.
                count = int(np.searchsorted(times, stop, side="left") + 1 if last else np.searchsorted(times, t + h))
                out[done:count] = np.tensordot(weights_at((times[done:count] - t) / h), piece, 1)
                done, x = count, piece[-1]
                peak = np.maximum(peak, np.abs(piece).max(axis=0))
    states = np.moveaxis(out, 0, -1)
    return states if start.ndim == 2 else states[:, 0]


class _Stepper:
    """Collocation steps of one or many runs with the same inputs."""

    def __init__(self, bound: Bound, inputs: Inputs, runs: int, tolerance: float) -> None:
        self.bound, self.inputs, self.runs, self.tolerance = bound, inputs, runs, tolerance
        self.matrix = radau(STAGES)[1]
        self.places = np.append(step_points()[1:], 0.5)
        self.middle = weights_at(np.array([0.5]))[0]
        self.slope = weights_at(np.array([0.5]), 1)[0]

    def step(self, t: float, h: float, ends: tuple[float, float], x: Array, peak: Array) -> Array | None:
        """Start and nodes of a step, shape ``(s + 1, n, m)``, or None where it is too long."""
        u = self.inputs.inside(t + h * self.places, *ends)
        columns = np.tile(u, self.runs)
        points = np.repeat(x[None], STAGES + 1, axis=0)
        error = np.inf
        for _ in range(_ITERATIONS):
            rates = self._rates(points, columns)
            nodes = x + h * np.tensordot(self.matrix, rates[:-1], 1)
            change = np.abs(nodes - points[:-1]).max(axis=0)
            before, error = error, float(np.max(change / peak))
            points[:-1] = nodes
            points[-1] = self.middle[0] * x + np.tensordot(self.middle[1:], nodes, 1)
            if error < 0.1 * self.tolerance:
                break
            if not error < before:
                return None
        else:
            return None
        slope = self.slope[0] * x + np.tensordot(self.slope[1:], points[:-1], 1)
        defect = np.abs(slope - h * self._rates(points, columns)[-1])
        if not float(np.max(defect / peak)) * 0.1 < max(self.tolerance, 1e-10):
            return None
        return np.concatenate((x[None], points[:-1]))

    def _rates(self, points: Array, columns: Array) -> Array:
        """Rates at the nodes and the middle, shape ``(s + 1, n, m)``."""
        count, n, m = points.shape
        rates = self.bound.rates(points.transpose(1, 2, 0).reshape(n, m * count), columns)
        return rates.reshape(n, m, count).transpose(2, 0, 1)
