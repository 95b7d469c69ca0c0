"""Maps of single steps against the matrix exponential."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from patchplan.reach.variational import STEP_STAGES, step_maps


@pytest.mark.parametrize("n", [3, 60], ids=["dense", "sparse"])
def test_maps_of_constant_coefficients_are_exponentials(n):
    random = np.random.default_rng(n)
    matrix = np.diag(random.uniform(-2, -0.5, n)) + np.diag(random.uniform(-1, 1, n - 1), 1)
    matrix[-1, 0] = 1.5
    ends = np.array([0.0, 0.05, 0.15])
    maps, parts = step_maps(ends, np.repeat(matrix[None], STEP_STAGES * 2, axis=0))
    # x' = A x + F with F constant: the exponential of [[A, 1], [0, 0]].
    for k, h in enumerate(np.diff(ends)):
        both = expm(h * np.block([[matrix, np.eye(n)], [np.zeros((n, 2 * n))]]))
        # Order 5: the error of a step is of the order (|A| h)^6 / 6! with |A| about 3.
        np.testing.assert_allclose(maps[k], both[:n, :n], atol=2e-6)
        np.testing.assert_allclose(parts[k].sum(axis=0), both[:n, n:], atol=1e-6)
