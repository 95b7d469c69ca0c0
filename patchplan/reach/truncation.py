"""How far a computed impulse response can be from the true one: a bound from what it leaves of its equation."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.areas import areas, cells_of
from patchplan.reach.collocation import STAGES, Pieces, radau, weights_at
from patchplan.reach.linear import solve_linear

Array = NDArray[np.float64]

#: Up to this many states the responses to impulses at all of them are computed for the bound.
_MOST_STATES = 40
#: Tolerance of those responses: their own error is in the bound as well.
_ROUGH = 1e-7


def residues(matrix: Any, pieces: Pieces) -> Array:
    """Integral of |p' - A p| of each state over the run, shape ``(n,)``, for a collocation solution p.

    Inside a step p' - A p is a polynomial that vanishes at the nodes, so that its value at one other place gives all of
    it.
    """
    nodes = radau(STAGES)[0]
    half = np.array([0.5])
    rise = np.einsum("s,ksn->kn", weights_at(half, 1)[0], pieces.points) / pieces.lengths[:, None]
    middle = np.einsum("s,ksn->kn", weights_at(half)[0], pieces.points)
    left = np.abs(rise - (matrix @ middle.T).T)
    s = np.linspace(0.0, 1.0, 2001)
    shape = np.abs(np.prod(s[:, None] - nodes, axis=1))
    share = float(np.trapezoid(shape, s)) / abs(float(np.prod(0.5 - nodes)))
    out: Array = share * (pieces.lengths @ left)
    return out


def missed(matrix: Any, pieces: Pieces, duration: float) -> Array | None:
    """Bound of the integral of |h - p| of each state over the run, shape ``(n,)``; None where none was found.

    p solves the equation with p' - A p = r left over, so that h - p is the response to -r: its integral is at most F
    times that of |r|, with F the integral of |exp(A t)|. F is bounded in one of two ways. Where the comparison matrix M
    (the diagonal of A, the magnitudes of the rest) is stable, |exp(A t)| <= exp(M t) and F <= -1/M (Berman & Plemmons
    1994, Nonnegative Matrices in the Mathematical Sciences, chapter 6); for a positive system M is A. Else F follows
    from the computed responses to an impulse at each state, whose own residues R close the bound:
    F <= F_computed / (1 - R).
    """
    left = residues(matrix, pieces)
    found = _by_comparison(matrix, left)
    if found is not None or left.size > _MOST_STATES:
        return found
    computed, rest = np.zeros((2, left.size, left.size))
    for i, unit in enumerate(np.eye(left.size)):
        run = solve_linear(matrix, unit, None, np.array([0.0, duration]), tolerance=_ROUGH)
        cells = cells_of(run, run.starts, run.starts + run.lengths)
        rows = np.repeat(np.arange(left.size), len(run.starts))
        sums = areas(np.vstack(list(np.moveaxis(cells, 2, 0))), np.tile(run.lengths, left.size), rows)[0]
        computed[:, i] = sums.reshape(left.size, -1).sum(axis=1)
        rest[:, i] = residues(matrix, run)
    if not np.abs(np.linalg.eigvals(rest)).max() < 0.5:
        return None
    flow = computed @ np.linalg.inv(np.eye(left.size) - rest)
    bound: Array = flow @ left
    return bound


def _by_comparison(matrix: Any, left: Array) -> Array | None:
    from scipy.sparse import csc_array, diags_array
    from scipy.sparse.linalg import splu

    diagonal = matrix.diagonal()
    if not (diagonal < 0).all():
        return None
    compared = csc_array(abs(matrix) + diags_array(diagonal - np.abs(diagonal)))
    try:
        solver = splu(compared)
    except RuntimeError:
        return None
    # A matrix with no negative entry off its diagonal is stable just where some positive vector is mapped below zero.
    if not (solver.solve(-np.ones(left.size)) > 0).all():
        return None
    bound: Array = solver.solve(-left)
    return bound
