"""The linear solver against closed forms, scipy's matrix exponential and python-control."""

from __future__ import annotations

import control
import numpy as np
import pytest
from scipy.linalg import expm
from scipy.sparse import diags_array

from patchplan.reach.collocation import radau, weights_at
from patchplan.reach.linear import solve_linear


def test_nodes_of_the_scheme():
    # Hairer & Wanner 1996, table IV.5.6: c of the Radau IIA scheme of order 5.
    nodes, matrix = radau(3)
    np.testing.assert_allclose(nodes, [(4 - 6**0.5) / 10, (4 + 6**0.5) / 10, 1.0], rtol=1e-14)
    np.testing.assert_allclose(matrix[-1], [(16 - 6**0.5) / 36, (16 + 6**0.5) / 36, 1 / 9], rtol=1e-13)


def test_step_polynomial_and_its_integral():
    nodes = np.append(0.0, radau(5)[0])
    np.testing.assert_allclose(weights_at(np.array([0.3])) @ nodes**4, [0.3**4], rtol=1e-12)
    np.testing.assert_allclose(weights_at(np.array([0.3]), 1) @ nodes**4, [4 * 0.3**3], rtol=1e-12)
    np.testing.assert_allclose(weights_at(np.array([0.3]), -1) @ nodes**4, [0.3**5 / 5], rtol=1e-12)


def test_step_response_of_a_resonance():
    matrix, t = np.array([[0.0, 1.0], [-4.0, -0.4]]), np.linspace(0, 20, 501)
    found = solve_linear(matrix, np.zeros(2), lambda t, a, b: np.array([0 * t, 4 + 0 * t]), np.array([0.0, 20.0]))
    expected = control.step_response(control.ss(matrix, [[0], [4]], [[1, 0]], 0), t).outputs
    np.testing.assert_allclose(found.at(t)[0], expected, atol=5e-9)
    states, mean = found.integral(np.array([20.0])), np.array([1.0, 0.0])
    # x' = A x + b integrated: A * integral = x(T) - x(0) - b T.
    np.testing.assert_allclose(matrix @ states[:, 0], found.at(np.array([20.0]))[:, 0] - [0, 80.0], atol=1e-7)
    assert abs(states[0, 0] / 20 - mean[0]) < 0.05


def test_jump_inside_the_run_is_met_exactly():
    def forcing(t, begin, stop):
        return np.where(begin >= 1.0, 1.0, 0.0) * np.ones((1, t.size))

    found = solve_linear(np.array([[-1.0]]), np.zeros(1), forcing, np.array([0.0, 1.0, 3.0]))
    np.testing.assert_allclose(found.at(np.array([0.5, 1.0, 2.0]))[0], [0, 0, 1 - np.exp(-1)], atol=1e-12)
    times, values = found.grid(found.parts(1e-4, 20000, 600), np.array([0.0, 1.0, 3.0]))
    assert (times == 1.0).sum() == 2
    assert times.size >= 600
    fine = np.linspace(1, 3, 4001)
    assert np.abs(np.interp(fine, times, values[0]) - (1 - np.exp(1 - fine))).max() < 1e-4


@pytest.mark.parametrize("n", [15, 80])
def test_chain_dense_and_sparse_against_the_matrix_exponential(n):
    matrix = diags_array([np.ones(n - 1), -2 * np.ones(n), np.ones(n - 1)], offsets=[-1, 0, 1]).tocsc()
    start = np.zeros(n)
    start[0] = 1.0
    found = solve_linear(matrix, start, None, np.array([0.0, 40.0]), tolerance=1e-10)
    np.testing.assert_allclose(found.at(np.array([40.0]))[:, 0], expm(40 * matrix.toarray())[:, 0], atol=1e-10)


def test_stiff_and_slow_together():
    found = solve_linear(np.diag([-1e6, -1.0]), np.ones(2), None, np.array([0.0, 5.0]))
    np.testing.assert_allclose(found.at(np.array([5.0]))[:, 0], [0.0, np.exp(-5)], atol=1e-9)
    assert len(found.starts) < 300


def test_growth_beyond_floats_is_an_error():
    with pytest.raises(FloatingPointError):
        solve_linear(np.array([[100.0]]), np.ones(1), None, np.array([0.0, 20.0]))
