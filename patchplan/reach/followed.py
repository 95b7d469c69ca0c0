"""What a patch makes besides the signals of the equation: products, and sums under a knob."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.field import Field

Array = NDArray[np.float64]


class Followed:
    """Products of signals, and of each row the sum of the terms under one set of knobs.

    No patch exists yet when settings are searched; these are the curves that its nodes will carry, whichever way it is
    drawn.
    """

    def __init__(self, field: Field) -> None:
        blocks = (*field.signal_blocks, field.rate_block)
        degree = max(len(b.factors) for b in blocks)
        factors = np.hstack([np.pad(b.factors, ((0, degree - len(b.factors)), (0, 0))) for b in blocks])
        owner = np.concatenate([i * (1 + len(field.names)) + b.rows for i, b in enumerate(blocks)])
        self.products = np.unique(factors[:, (factors > 0).sum(axis=0) > 1], axis=1)
        self.terms = np.flatnonzero(field.knobs.any(axis=0))
        self.factors = factors[:, self.terms]
        keys = np.vstack((owner, field.knobs))[:, self.terms]
        groups, group = np.unique(keys, axis=1, return_inverse=True)
        self.sums = (np.arange(groups.shape[1])[:, None] == group.ravel()).astype(float)

    def curves(self, values: Array, weights: Array) -> Array:
        """Their values over one run, shape ``(n_followed, n_times)``.

        Parameters
        ----------
        values
            Every name, shape ``(n_names, n_times)``.
        weights
            Shape ``(n_terms,)``.
        """
        z = np.concatenate((np.ones((1, values.shape[1])), values))
        sums = (self.sums * weights[self.terms]) @ z[self.factors].prod(axis=0)
        out: Array = np.concatenate((z[self.products].prod(axis=0), sums))
        return out
