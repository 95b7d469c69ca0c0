"""Linear equations with many right-hand sides: maps of Radau steps, and convolution with impulse responses."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.collocation import radau

Array = NDArray[np.float64]

#: Stages of a step: order 5, L-stable.
STEP_STAGES = 3


def stage_times(ends: Array) -> Array:
    """Times of the stages of steps, shape ``((n_ends - 1) * 3,)``; the last of each stands just before its end."""
    nodes = np.minimum(radau(STEP_STAGES)[0], 1 - 1e-9)
    times: Array = (ends[:-1, None] + np.diff(ends)[:, None] * nodes).ravel()
    return times


def step_maps(ends: Array, jacobians: Array, forcing: Array) -> tuple[Array, Array]:
    """Steps of x' = A(t) x + F(t) as x -> R x + g, by the Radau IIA scheme of order 5.

    Hairer & Wanner 1996, Solving Ordinary Differential Equations II, section IV.5.

    Parameters
    ----------
    ends
        Shape ``(n_steps + 1,)``.
    jacobians, forcing
        At ``stage_times(ends)``: shapes ``(n_times, n, n)`` and ``(n_times, n, n_columns)``.

    Returns
    -------
    R, g
        Shapes ``(n_steps, n, n)`` and ``(n_steps, n, n_columns)``.
    """
    scheme, h, n = radau(STEP_STAGES)[1], np.diff(ends), jacobians.shape[1]
    system = -np.einsum("k,jl,kjab->kjalb", h, scheme, jacobians.reshape(h.size, STEP_STAGES, n, n))
    system = system.reshape(h.size, STEP_STAGES * n, STEP_STAGES * n) + np.eye(STEP_STAGES * n)
    width = n + forcing.shape[2]
    right = np.concatenate((jacobians, forcing), axis=2).reshape(h.size, STEP_STAGES * n, width)
    slopes = np.linalg.solve(system, right).reshape(h.size, STEP_STAGES, n, width)
    step = np.einsum("k,l,klac->kac", h, scheme[-1], slopes)
    return step[..., :n] + np.eye(n), step[..., n:]


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
