"""Radau collocation: its scheme, and solutions stored as one polynomial for each step."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Stages of the steps of `linear`: order 9 at the ends of a step.
STAGES = 5
#: Numbers worked on at a time.
_BLOCK = 1_000_000


@cache
def radau(stages: int) -> tuple[Array, Array]:
    """Nodes ``(s,)`` in (0, 1], the last 1, and matrix ``(s, s)`` of the Radau IIA scheme.

    Hairer & Wanner 1996, Solving Ordinary Differential Equations II, section IV.5.
    """
    from numpy.polynomial import legendre

    series = np.zeros(stages + 1)
    series[stages - 1 :] = 1.0, -1.0
    nodes = np.sort((legendre.legroots(series).real + 1) / 2)
    nodes[-1] = 1.0
    powers = np.arange(1, stages + 1)
    matrix = (nodes[:, None] ** powers / powers) @ np.linalg.inv(nodes[:, None] ** (powers - 1))
    return nodes, matrix


@cache
def step_points() -> Array:
    """Places of a step's points, 0 and the nodes, shape ``(s + 1,)``."""
    return np.append(0.0, radau(STAGES)[0])


def weights_at(s: Array, derivative: int = 0) -> Array:
    """Weights of a step's points in its polynomial at places s, shape ``(n_s, n_points)``.

    ``derivative`` counts derivatives by s; -1 is the integral from 0.
    """
    inverse = np.linalg.inv(step_points()[:, None] ** np.arange(STAGES + 1))
    powers = np.arange(STAGES + 1)
    factor = 1 / (powers + 1) if derivative == -1 else np.ones(STAGES + 1)
    for i in range(derivative):
        factor = factor * np.maximum(powers - i, 0)
    out: Array = (factor * s[:, None] ** np.maximum(powers - derivative, 0)) @ inverse
    return out


@dataclass(frozen=True)
class Pieces:
    """A solution as one polynomial for each step.

    Attributes
    ----------
    starts, lengths
        Shape ``(n_steps,)``.
    points
        Shape ``(n_steps, s + 1, n)``: the solution at the step's start and at its nodes.
    """

    starts: Array
    lengths: Array
    points: Array

    def parts(self, aim: float, most: int, least: int) -> NDArray[np.int_]:
        """How many parts each step needs for linear interpolation to err by less than ``aim`` of each state's peak."""
        peak = np.abs(self.points).max(axis=(0, 1))
        peak = np.where(peak > 0, peak, 1.0)
        bends = np.einsum("pk,ckn->cpn", weights_at(np.array([0.0, 0.5, 1.0]), 2), self.points) / peak
        bend = np.abs(bends).max(axis=(1, 2))
        parts = np.sqrt(bend / 8 / aim)
        total = float(np.ceil(parts).sum())
        parts = np.maximum(parts, self.lengths / self.lengths.sum() * least)
        if total > most:
            parts = parts * (0.5 * most / total)
        counts: NDArray[np.int_] = np.ceil(parts).clip(1).astype(int)
        return counts

    def grid(self, parts: NDArray[np.int_], jumps: Array) -> tuple[Array, Array]:
        """Times and values ``(n, n_times)`` with each step in parts; jumps appear twice, the end of the run once."""
        ends = np.append(self.starts[1:], self.starts[-1] + self.lengths[-1])
        closing = np.isin(ends, jumps)
        closing[-1] = True
        counts = parts + closing
        offsets = np.cumsum(counts) - counts
        times = np.empty(counts.sum())
        values = np.empty((times.size, self.points.shape[2]))
        for count in np.unique(parts):
            which = np.flatnonzero(parts == count)
            s = np.arange(count) / count
            rows = offsets[which, None] + np.arange(count)
            times[rows] = self.starts[which, None] + s * self.lengths[which, None]
            values[rows] = np.einsum("cs,ksn->kcn", weights_at(s), self.points[which])
        last = (offsets + parts)[closing]
        times[last], values[last] = ends[closing], self.points[closing, -1]
        return times, np.ascontiguousarray(values.T)

    def at(self, wanted: Array) -> Array:
        """Values at any times of the run, shape ``(n, n_wanted)``."""
        step = np.clip(np.searchsorted(self.starts, wanted, side="right") - 1, 0, len(self.starts) - 1)
        return self._combined(weights_at((wanted - self.starts[step]) / self.lengths[step]), step)

    def _combined(self, weights: Array, step: NDArray[np.int_]) -> Array:
        """Sums of weights times the points of steps, ``(n, n_wanted)``; in blocks, as the points are many."""
        out = np.empty((self.points.shape[2], len(step)))
        block = max(1, _BLOCK // self.points[0].size)
        for first in range(0, len(step), block):
            here = slice(first, first + block)
            out[:, here] = np.einsum("ts,tsn->nt", weights[here], self.points[step[here]])
        return out

    def integral(self, wanted: Array) -> Array:
        """Integral from the start of the run to any times, shape ``(n, n_wanted)``."""
        whole = np.einsum("s,ksn,k->kn", weights_at(np.ones(1), -1)[0], self.points, self.lengths)
        before = np.concatenate((np.zeros((1, whole.shape[1])), np.cumsum(whole, axis=0)[:-1]))
        step = np.clip(np.searchsorted(self.starts, wanted, side="right") - 1, 0, len(self.starts) - 1)
        weights = weights_at((wanted - self.starts[step]) / self.lengths[step], -1) * self.lengths[step, None]
        out: Array = before[step].T + self._combined(weights, step)
        return out
