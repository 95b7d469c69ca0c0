"""Many runs of a linear System at once, each with its own coefficients, on common steps."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.collocation import radau
from patchplan.reach.field import Bound
from patchplan.reach.inputs import Inputs
from patchplan.reach.solve import GrowsWithoutBoundError
from patchplan.reach.variational import STEP_STAGES, stage_times

Array = NDArray[np.float64]


def march(bound: Bound, start: Array, inputs: Inputs, ends: Array) -> Array:
    """States of m runs at step ends by the Radau IIA scheme of order 5, shape ``(n, m, n_ends)``.

    Hairer & Wanner 1996, Solving Ordinary Differential Equations II, section IV.5. The cost of a step is one small
    product for each run, as steps of one length share their maps.

    Parameters
    ----------
    bound
        Weights of shape ``(n_terms, m)`` of a linear System.
    start
        Shape ``(n,)``.
    ends
        Step ends [problem time], the inputs' edges among them.

    Raises
    ------
    GrowsWithoutBoundError
        With the time.
    """
    matrices, by_source, constants = _parts(bound)
    m, n = constants.shape
    times = stage_times(ends)
    stretch = np.searchsorted(inputs.edges, times, side="right") - 1
    edges = inputs.edges[np.clip(np.stack((stretch, stretch + 1)), 0, len(inputs.edges) - 1)]
    u = inputs.inside(times, edges[0], edges[1])
    forcing = np.einsum("jas,st->tja", by_source, u) + constants
    lengths, which = np.unique(np.round(np.diff(ends) / ends[-1], 12), return_inverse=True)
    maps, added = _maps(matrices, lengths * ends[-1])
    rows = forcing.reshape(-1, STEP_STAGES, m, n).transpose(0, 2, 1, 3).reshape(-1, m, STEP_STAGES * n, 1)
    out = np.empty((len(ends), m, n))
    out[0] = x = np.repeat(start[None], m, axis=0)
    with np.errstate(over="ignore", invalid="ignore"):
        for k, length in enumerate(which.tolist()):
            x = (maps[length] @ x[..., None] + added[length] @ rows[k])[..., 0]
            out[k + 1] = x
    finite = np.isfinite(out).all(axis=(1, 2))
    if not finite.all():
        raise GrowsWithoutBoundError(float(ends[int(np.argmin(finite))]))
    return out.transpose(2, 1, 0)


def _parts(bound: Bound) -> tuple[Array, Array, Array]:
    """A, B and c of every run: shapes ``(m, n, n)``, ``(m, n, n_sources)`` and ``(m, n)``."""
    n, sources, m = bound.field.n_states, bound.field.n_sources, bound.weights.shape[1]
    zero = np.zeros((n, m)), np.zeros((sources, m))
    constant = bound.rates(*zero)
    both = np.empty((m, n, n + sources))
    for i in range(n + sources):
        table = zero[0].copy(), zero[1].copy()
        table[i >= n][i - n if i >= n else i] = 1.0
        both[:, :, i] = (bound.rates(*table) - constant).T
    return both[..., :n], both[..., n:], np.ascontiguousarray(constant.T)


def _maps(matrices: Array, lengths: Array) -> tuple[Array, Array]:
    """Of each step length and run: x -> map x + added f, shapes ``(k, m, n, n)`` and ``(k, m, n, 3 n)``."""
    scheme = radau(STEP_STAGES)[1]
    m, n = matrices.shape[:2]
    size = STEP_STAGES * n
    whole = np.einsum("k,jl,mab->kmjalb", lengths, scheme, matrices).reshape(lengths.size, m, size, size)
    inverse = np.linalg.inv(np.eye(size) - whole).reshape(lengths.size, m, STEP_STAGES, n, size)
    added = np.einsum("k,l,kmlas->kmas", lengths, scheme[-1], inverse)
    return np.eye(n) + added @ np.tile(matrices, (1, STEP_STAGES, 1)), added
