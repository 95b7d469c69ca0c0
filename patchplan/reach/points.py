"""Settings of adjustable and uncertain parameters: corners, a sample, and points around the worst so far."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from itertools import product

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.constants import constant_value
from patchplan.equation.system import System
from patchplan.reach.field import DENSE_LIMIT

Array = NDArray[np.float64]

SEED = 20240229


@dataclass(frozen=True, slots=True)
class Effort:
    """How much is tried: all corners up to so many parameters, points of the sample of a box of one and of more
    parameters, rounds of climbing, least and most points of a round.
    """

    corners_up_to: int
    sample: tuple[int, int]
    rounds: int
    climbers: tuple[int, int]


#: Of 34 random systems with two knobs, 64 points missed the highest peak of two by up to 0.3 %, 128 of none.
#: Above `DENSE_LIMIT` states runs are solved one by one.
FULL, FEW = Effort(7, (16, 128), 3, (32, 48)), Effort(4, (16, 16), 2, (16, 16))


def parameters_at(system: System, points: Array) -> list[Mapping[str, float]]:
    """Values of the adjustable parameters at points of the unit box."""
    ends = [(p.name, float(p.low or 0), float(p.high or 0)) for p in system.adjustable]
    return [{n: a + (b - a) * float(s) for (n, a, b), s in zip(ends, point, strict=True)} for point in points]


def knobs_at(system: System, points: Array) -> dict[str, Array]:
    """Values of all knobs at points of the adjustable box, ``points`` of shape ``(m, n_adjustable)`` in 0 ... 1."""
    rows = []
    for point in points:
        values = {}
        for p, s in zip(system.adjustable, point, strict=True):
            low, high = p.low or Fraction(0), p.high or Fraction(0)
            values[p.name] = low + (high - low) * Fraction(float(s))
        rows.append([float(constant_value(k.tree, values)) for k in system.knobs])
    table = np.array(rows).reshape(len(points), len(system.knobs))
    return {k.name: table[:, i] for i, k in enumerate(system.knobs)}


def effort_for(system: System) -> Effort:
    """How much is tried for a System."""
    return FEW if len(system.states) > DENSE_LIMIT else FULL


def box_points(count: int, effort: Effort) -> Array:
    """Corners and a Sobol sample of the unit box; of many parameters the ends of each axis and some corners.

    The sample is that of Sobol 1967 (On the distribution of points in a cube and the approximate evaluation of
    integrals), its points moved from the lower corner to the middle of their cells, so that each parameter takes every
    level once and no corner is run twice.
    """
    # All of scipy.stats comes in with it, so that only problems with a box wait for it.
    from scipy.stats.qmc import Sobol

    size = effort.sample[count > 1]
    if count <= effort.corners_up_to:
        corners = np.array(list(product((0.0, 1.0), repeat=count)))
    else:
        axes = np.full((2 * count, count), 0.5)
        axes[np.arange(2 * count), np.repeat(np.arange(count), 2)] = np.tile((0.0, 1.0), count)
        corners = np.concatenate((axes, np.random.default_rng(SEED).choice((0.0, 1.0), (size, count))))
    return np.concatenate((corners, Sobol(count, scramble=False).random(size) + 0.5 / size))


def first_points(system: System) -> Array:
    """`box_points` of a System; where these leave out corners, also those of each knob that has several parameters."""
    names, effort = [p.name for p in system.adjustable], effort_for(system)
    points = [box_points(len(names), effort)]
    for knob in system.knobs if len(names) > effort.corners_up_to else ():
        moved = [names.index(p) for p in knob.parameters[: effort.corners_up_to]]
        corners = np.array(list(product((0.0, 1.0), repeat=len(moved))))
        points.append(np.full((len(corners), len(names)), 0.5))
        points[-1][:, moved] = corners
    return np.concatenate(points)


def climb_points(
    points: Array, heights: Array, count: tuple[int, int], radius: float, random: np.random.Generator
) -> Array:
    """New points, ``count`` at least and at most, around those where some row of ``heights`` is largest.

    ``heights`` has the shape ``(n_rows, n_points)``.
    """
    worst = most_worst(heights)
    chosen = points[worst[np.arange(np.clip(worst.size, *count)) % worst.size]]
    moved: Array = np.clip(chosen + random.uniform(-radius, radius, chosen.shape), 0.0, 1.0)
    return moved


def axis_points(points: Array, heights: Array, most: int, radius: float) -> Array:
    """Points a step along each axis from those where some row of ``heights`` is largest, ``most`` at most."""
    steps = radius * np.vstack((np.eye(points.shape[1]), -np.eye(points.shape[1])))
    near = np.clip(points[most_worst(heights)][:, None] + steps, 0.0, 1.0).reshape(-1, points.shape[1])
    return _new(points, near[:most])


def parabola_points(points: Array, heights: Array, centres: NDArray[np.intp], radius: float) -> Array:
    """Where parabolas along each axis through the `axis_points` of a row's centre are highest, new points only.

    Parameters
    ----------
    centres
        Place of the point that each row was stepped from.
    """
    place = {tuple(point): i for i, point in enumerate(points.tolist())}
    tops = []
    for row, centre in zip(heights, centres, strict=True):
        middle, top = points[centre], points[centre].copy()
        for axis in range(middle.size):
            steps, values = [0.0], [row[centre]]
            for step in (-radius, radius):
                near = middle.copy()
                near[axis] = np.clip(near[axis] + step, 0.0, 1.0)
                found = place.get(tuple(near.tolist()), centre)
                if found != centre:
                    steps.append(near[axis] - middle[axis])
                    values.append(row[found])
            top[axis] += _top(np.array(steps), np.array(values), 2 * radius)
        tops.append(np.clip(top, 0.0, 1.0))
    return _new(points, np.array(tops))


def _top(steps: Array, values: Array, furthest: float) -> float:
    """The highest place within reach of a parabola through up to three points, the first of them at 0."""
    best = float(steps[values.argmax()])
    if len(steps) < 3:
        return best
    bend, slope, _ = np.polyfit(steps, values, 2)
    return float(np.clip(-slope / (2 * bend), -furthest, furthest)) if bend < 0 else float(np.sign(best)) * furthest


def _new(points: Array, found: Array) -> Array:
    """Those of the found points that are not there yet, each once."""
    known = set(map(tuple, points.tolist()))
    kept = [point for point in dict.fromkeys(map(tuple, found.tolist())) if point not in known]
    return np.array(kept).reshape(-1, points.shape[1])


def steep_corners(points: Array, heights: Array) -> Array:
    """Corners of the box to which the planes through the rows of ``heights`` rise, for the most rows first."""
    slopes = np.linalg.lstsq(points - points.mean(axis=0), (heights - heights.mean(axis=1, keepdims=True)).T)[0]
    corners, uses = np.unique((slopes > 0).T.astype(float), axis=0, return_counts=True)
    ordered: Array = corners[np.argsort(-uses, kind="stable")]
    return ordered


def most_worst(heights: Array) -> NDArray[np.intp]:
    """Places of the largest number of each row, those that serve most rows first."""
    places, uses = np.unique(heights.argmax(axis=1), return_counts=True)
    ordered: NDArray[np.intp] = places[np.argsort(-uses, kind="stable")]
    return ordered
