"""Linear equations with many right-hand sides: maps of Radau steps, and convolution with impulse responses."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.collocation import radau

Array = NDArray[np.float64]

#: Stages of a step: order 5, L-stable.
STEP_STAGES = 3
#: Above this many states the few entries of A are made use of.
_DENSE = 40


def stage_times(ends: Array) -> Array:
    """Times of the stages of steps, shape ``((n_ends - 1) * 3,)``; the last of each stands just before its end."""
    nodes = np.minimum(radau(STEP_STAGES)[0], 1 - 1e-9)
    times: Array = (ends[:-1, None] + np.diff(ends)[:, None] * nodes).ravel()
    return times


def step_maps(ends: Array, jacobians: Array) -> tuple[Array, Array]:
    """Steps of x' = A(t) x + F(t) as x -> R x + sum over stages of P F(stage), by the Radau IIA scheme of order 5.

    Hairer & Wanner 1996, Solving Ordinary Differential Equations II, section IV.5.

    Parameters
    ----------
    ends
        Shape ``(n_steps + 1,)``.
    jacobians
        A at ``stage_times(ends)``, shape ``(n_times, n, n)``.

    Returns
    -------
    R, P
        Shapes ``(n_steps, n, n)`` and ``(n_steps, 3, n, n)``.
    """
    scheme, h, n = radau(STEP_STAGES)[1], np.diff(ends), jacobians.shape[1]
    matrices = jacobians.reshape(h.size, STEP_STAGES, n, n)
    # P is a few rows of an inverse, so the transposed system is solved, for n right-hand sides only.
    last = np.kron(scheme[-1][:, None], np.eye(n))
    solve = _solved_sparse if n > _DENSE else _solved_dense
    rows = solve(scheme, h, matrices, last).reshape(h.size, STEP_STAGES, n, n)
    parts = rows.transpose(0, 1, 3, 2) * h[:, None, None, None]
    return np.eye(n) + (parts @ matrices).sum(axis=1), parts


def _solved_dense(scheme: Array, h: Array, matrices: Array, right: Array) -> Array:
    size = right.shape[0]
    system = -np.einsum("k,jl,kjab->klbja", h, scheme, matrices).reshape(h.size, size, size) + np.eye(size)
    found: Array = np.linalg.solve(system, np.broadcast_to(right, (h.size, *right.shape)))
    return found


def _solved_sparse(scheme: Array, h: Array, matrices: Array, right: Array) -> Array:
    from scipy.sparse import csr_array, eye_array, kron, vstack
    from scipy.sparse.linalg import splu

    found = np.empty((h.size, *right.shape))
    for k, step in enumerate(h.tolist()):
        blocks = [kron(scheme[[j]], csr_array(matrices[k, j])) for j in range(STEP_STAGES)]
        system = eye_array(right.shape[0]) - step * vstack(blocks)
        found[k] = splu(system.T.tocsc()).solve(right)
    return found


def convolved(kernels: Array, forcing: Array, rows: NDArray[np.intp]) -> Array:
    """Responses at the ends of equal cells: sum over earlier cells of kernel cell * mean forcing of its cell.

    Parameters
    ----------
    kernels
        Integrals of impulse responses over each cell, shape ``(n_kernels, n_cells)``.
    forcing
        Means over each cell, shape ``(n_columns, n_cells)``.
    rows
        Which kernel belongs to each column.
    """
    from scipy.fft import irfft, next_fast_len, rfft

    cells = kernels.shape[1]
    length = next_fast_len(2 * cells - 1, real=True)
    spectra = rfft(kernels, length, axis=1)
    out: Array = irfft(spectra[rows] * rfft(forcing, length, axis=1), length, axis=1)[:, :cells]
    return out
