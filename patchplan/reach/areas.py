"""Areas under the magnitude of curves given as polynomials: an upper bound and a lower one, as close as wanted."""

from __future__ import annotations

from functools import cache
from math import comb

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.collocation import STAGES, Pieces, step_points

Array = NDArray[np.float64]
Index = NDArray[np.intp]

#: Gap allowed between the bounds of a row, as a part of its area, and halvings of a cell spent on it.
_GAP, _HALVINGS = 1e-9, 40


@cache
def _to_powers() -> Array:
    """From the values at a step's points to the coefficients of 1, s, s^2 ... on 0 <= s <= 1."""
    return np.asarray(np.linalg.inv(step_points()[:, None] ** np.arange(STAGES + 1)), np.float64)


@cache
def _to_bernstein() -> Array:
    """From the coefficients of powers to those of Bernstein's polynomials."""
    table = [[comb(j, i) / comb(STAGES, i) if i <= j else 0.0 for i in range(STAGES + 1)] for j in range(STAGES + 1)]
    return np.array(table)


def bernstein_maps(first: Array, last: Array) -> Array:
    """Maps from a step's points to Bernstein coefficients on parts of it, shape ``(k, s + 1, s + 1)``.

    Parameters
    ----------
    first, last
        Ends of the parts, shape ``(k,)``, within 0 ... 1 of the step.
    """
    powers = np.arange(STAGES + 1)
    choose = np.array([[comb(k, i) for k in powers] for i in powers], float)
    lower = np.maximum(powers[None, :] - powers[:, None], 0)
    moved = choose * first[:, None, None] ** lower * (last - first)[:, None, None] ** powers[:, None]
    out: Array = _to_bernstein() @ moved @ _to_powers()
    return out


def cells_of(pieces: Pieces, starts: Array, ends: Array) -> Array:
    """Bernstein coefficients of every state on cells that lie within one step each, shape ``(k, s + 1, n)``."""
    step = np.clip(np.searchsorted(pieces.starts, (starts + ends) / 2, side="right") - 1, 0, len(pieces.starts) - 1)
    begin, length = pieces.starts[step], pieces.lengths[step]
    out: Array = bernstein_maps((starts - begin) / length, (ends - begin) / length) @ pieces.points[step]
    return out


def areas(coefficients: Array, lengths: Array, rows: Index) -> tuple[Array, Array]:
    """Upper and lower bound of the integral of the magnitude over each cell, each of shape ``(k,)``.

    A polynomial lies within the hull of its Bernstein coefficients c (Farouki 2012, The Bernstein polynomial basis: a
    centennial retrospective): its area is at most the mean of |c| and at least |mean of c|, and both agree where all c
    have one sign. Cells in which they differ, those around a change of sign, are halved until the gaps of a row's cells
    together are below 1e-9 of its area.

    Parameters
    ----------
    coefficients
        Shape ``(k, s + 1)``.
    lengths
        Shape ``(k,)``.
    rows
        To which row each cell belongs.
    """
    upper, lower = _bounds(coefficients, lengths)
    cell = np.arange(len(lengths))
    c, length, above, below = coefficients, lengths, upper.copy(), lower.copy()
    for _ in range(_HALVINGS):
        gaps = np.bincount(rows, upper - lower)
        wide = gaps > _GAP * np.bincount(rows, upper)
        kept = np.flatnonzero(wide[rows[cell]] & (above > below * (1 + 1e-12)))
        if not kept.size:
            break
        cell, c, length = cell[kept], c[kept], length[kept]
        upper -= np.bincount(cell, above[kept], upper.size)
        lower -= np.bincount(cell, below[kept], upper.size)
        c, length, cell = _halved(c), np.tile(length / 2, 2), np.tile(cell, 2)
        above, below = _bounds(c, length)
        upper += np.bincount(cell, above, upper.size)
        lower += np.bincount(cell, below, upper.size)
    return upper, lower


def _bounds(coefficients: Array, lengths: Array) -> tuple[Array, Array]:
    upper: Array = lengths * np.abs(coefficients).mean(axis=1)
    return upper, lengths * np.abs(coefficients.mean(axis=1))


def _halved(c: Array) -> Array:
    """Coefficients of the left halves, then of the right ones (de Casteljau)."""
    left, right = [c[:, 0]], [c[:, -1]]
    for _ in range(STAGES):
        c = (c[:, :-1] + c[:, 1:]) / 2
        left.append(c[:, 0])
        right.append(c[:, -1])
    return np.concatenate((np.stack(left, axis=1), np.stack(right[::-1], axis=1)))
