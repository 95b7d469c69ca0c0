"""Solution of x' = A x + f(t) with constant A by Radau collocation of order 9, for few states or many."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.collocation import STAGES, Pieces, radau, step_points, weights_at

Array = NDArray[np.float64]
Forcing = Callable[[Array, float, float], Array]

#: Below this many states a step is one product with a dense matrix; above, sparse solves for each stage.
_DENSE = 20
#: Steps are halvings of a stretch, at most this many times.
_HALVINGS = 40


class _Stepper:
    """Steps of given lengths; factorisations are kept for each length."""

    def __init__(self, matrix: Any) -> None:
        from scipy.sparse import csc_array

        self.size = matrix.shape[0]
        self.matrix: Any = csc_array(matrix).toarray() if self.size <= _DENSE else csc_array(matrix)
        self._kept: dict[str, Any] = {}
        scheme = radau(STAGES)[1]
        poles, vectors = np.linalg.eig(scheme)
        keep = np.flatnonzero(poles.imag >= -1e-14)
        self.real_pole = float(poles[np.argmin(np.abs(poles.imag))].real)
        self.poles = poles[keep]
        self.back = vectors[:, keep] * np.where(np.abs(poles[keep].imag) > 1e-14, 2.0, 1.0)
        self.forth = np.linalg.inv(vectors)[keep]

    def _factors(self, h: float) -> Any:
        # Lengths that differ by rounding only share one factorisation.
        key = f"{h:.11e}"
        if key not in self._kept:
            self._kept[key] = self._dense(h) if self.size <= _DENSE else self._sparse(h)
        return self._kept[key]

    def _dense(self, h: float) -> tuple[Array, Array]:
        scheme, unit = radau(STAGES)[1], np.eye(self.size)
        size = STAGES * self.size
        both = np.einsum("jl,pab->pjalb", scheme, np.stack((self.matrix, unit))).reshape(2, size, size)
        return np.linalg.solve(np.eye(size) - h * both[0], h * both[1]), np.linalg.inv(
            unit - h * self.real_pole * self.matrix
        )

    def _sparse(self, h: float) -> list[Any]:
        from scipy.sparse import eye_array
        from scipy.sparse.linalg import splu

        unit = eye_array(self.size, format="csc")
        solvers = []
        for pole in self.poles:
            shift = h * (pole.real if abs(pole.imag) < 1e-14 else pole)
            solvers.append(splu((unit - shift * self.matrix).tocsc()))
        return solvers

    def step(self, h: float, x: Array, f: Array) -> Array:
        """Solution at the nodes, shape ``(s, n)``, from x with forcing ``(s, n)`` at the nodes."""
        slopes = f + self.matrix @ x
        factors = self._factors(h)
        if self.size <= _DENSE:
            step: Array = x + (factors[0] @ slopes.ravel()).reshape(STAGES, self.size)
            return step
        turned = self.forth @ slopes
        solved = [self._solve(lu, h * pole * row) for lu, pole, row in zip(factors, self.poles, turned, strict=True)]
        step = x + (self.back @ np.array(solved)).real
        return step

    @staticmethod
    def _solve(lu: Any, right: Array) -> Array:
        solved: Array = lu.solve(right.real.copy() if lu.L.dtype == float else right)
        return solved

    def damp(self, h: float, defect: Array) -> Array:
        """A defect as an error of the solution: stiff parts, which decay within the step, are filtered out."""
        factors = self._factors(h)
        real = int(np.argmin(np.abs(self.poles.imag)))
        solved: Array = factors[1] @ defect if self.size <= _DENSE else factors[real].solve(defect)
        return solved


def solve_linear(
    matrix: Any,
    start: Array,
    forcing: Forcing | None,
    edges: Array,
    *,
    tolerance: float = 1e-9,
    largest: float = np.inf,
) -> Pieces:
    """Integrate x' = A x + f(t), steps chosen among halvings of each stretch.

    Parameters
    ----------
    matrix
        A, shape ``(n, n)``, dense or sparse.
    start
        Shape ``(n,)``.
    forcing
        f(times, begin, stop), shape ``(n, n_times)``, for times of the stretch (begin, stop); None for zero.
    edges
        Ends of the stretches; f is smooth inside each.
    tolerance
        Error allowed inside a step as a part of each state's peak; the ends of steps are far better (order 9).
    largest
        The run ends with the first step that goes beyond this.

    Raises
    ------
    FloatingPointError
        The solution left the range of floating point numbers; the argument is the time.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        return _solved(_Stepper(matrix), np.array(start, float), forcing, edges, tolerance, largest)


class _Ahead:
    """The forcing at a step's nodes and middle, computed for several steps of one length at a time."""

    def __init__(self, forcing: Forcing | None, places: Array, size: int) -> None:
        self.forcing, self.places = forcing, places
        self.block: Array = np.zeros((1, places.size, size))
        self.key: tuple[float, int] = (0.0, -1)
        self.first = 0

    def at(self, begin: float, stop: float, level: int, index: int) -> Array:
        """Shape ``(s + 1, n)``, of step ``index`` among the halvings of the stretch (begin, stop)."""
        if self.forcing is None:
            return np.asarray(self.block[0])
        known = self.key == (begin, level) and self.first <= index
        if not known or index >= self.first + len(self.block):
            # As long as the length stays, twice as many steps are computed each time.
            count = min(2 * len(self.block) if known else 1, 64, 2**level - index)
            h = (stop - begin) / 2**level
            times = begin + h * (index + np.arange(count)[:, None] + self.places)
            self.block = self.forcing(times.ravel(), begin, stop).T.reshape(count, self.places.size, -1)
            self.key, self.first = (begin, level), index
        return np.asarray(self.block[index - self.first])


def _solved(
    stepper: _Stepper, x: Array, forcing: Forcing | None, edges: Array, tolerance: float, largest: float
) -> Pieces:
    slope, middle = weights_at(np.array([0.5]), 1)[0], weights_at(np.array([0.5]))[0]
    places = np.append(step_points()[1:], 0.5)
    peak = np.abs(x)
    starts: list[float] = []
    lengths: list[float] = []
    points: list[Array] = []
    ahead = _Ahead(forcing, places, x.size)
    wished = np.inf
    for begin, stop in pairwise(edges.tolist()):
        span, index = stop - begin, 0
        level = min(_HALVINGS, max(0, int(np.ceil(np.log2(span / wished) - 0.01)))) if wished < span else 0
        while index < 2**level:
            h = span / 2**level
            t = begin + index * h
            f = ahead.at(begin, stop, level, index)
            inner = stepper.step(h, x, f[:-1])
            piece = np.concatenate((x[None], inner))
            defect = slope @ piece - h * (stepper.matrix @ (middle @ piece) + f[-1])
            peak_here = np.maximum(peak, np.abs(inner).max(axis=0))
            scale = peak_here + 1e-4 * peak_here.max() + 1e-300
            error = float(np.max(np.abs(stepper.damp(h, defect)) / scale)) * 0.1 / tolerance
            if not np.isfinite(error):
                raise FloatingPointError(t)
            if error > 1 and level < _HALVINGS:
                level, index = level + 1, 2 * index
                continue
            starts.append(t)
            lengths.append(h)
            points.append(piece)
            x, peak, index = inner[-1], peak_here, index + 1
            if np.abs(inner).max(initial=0.0) > largest:
                return Pieces(np.array(starts), np.array(lengths), np.array(points))
            # The error inside a step falls by 64 on halving: a step may double once it is well below that.
            if error < 1 / 100 and level > 0 and index % 2 == 0:
                level, index = level - 1, index // 2
        wished = span / 2**level if level or error > 1 / 100 else np.inf
    return Pieces(np.array(starts), np.array(lengths), np.array(points))
