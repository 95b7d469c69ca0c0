"""The numeric form of a System against the same formulas written by hand."""

from __future__ import annotations

import numpy as np
from scipy.optimize import approx_fprime

from patchplan.equation.system import Source
from patchplan.reach.field import field_of
from tests.systems import knob, lorenz, system, term


def mixed():
    """A system with signals of signals, a power, a source and two knobs."""
    return system(
        {"x": 1, "y": 2},
        {
            "x": [term(3, "w", knobs=["a"]), term(-1, "x", "x", "y")],
            "y": [term(2, "v", "u"), term("1/2", knobs=["a", "b"])],
        },
        signals={"w": [term(1, "x", "y"), term(4)], "v": [term(1, "w", "w"), term(-1, "u")]},
        sources=[Source("u", None)],
        knobs=[knob("a", 1, 2, 3), knob("b", 1, 5, 9)],
    )


def by_hand(x, y, u, a, b):
    w = x * y + 4
    v = w * w - u
    return np.array([3 * a * w - x * x * y, 2 * v * u + a * b / 2]), np.array([w, v])


def test_values_are_those_of_the_formulas():
    field = field_of(mixed())
    bound = field.bind(field.weights({"a": 2.0, "b": 5.0}))
    rates, signals = by_hand(0.7, -1.3, 0.4, 2.0, 5.0)
    np.testing.assert_allclose(bound.rates(np.array([0.7, -1.3]), np.array([0.4])), rates, rtol=1e-14)
    np.testing.assert_allclose(bound.all_values(np.array([0.7, -1.3]), np.array([0.4]))[3:], signals, rtol=1e-14)
    assert field.names == ("x", "y", "u", "w", "v")


def test_many_runs_at_once_have_their_own_knobs():
    field = field_of(mixed())
    a, states = np.array([1.0, 2.0, 3.0]), np.array([[0.1, 0.2, 0.3], [1.0, -1.0, 2.0]])
    bound = field.bind(field.weights({"a": a, "b": 5.0}))
    found = bound.rates(states, np.array([[0.4, 0.5, 0.6]]))
    expected = [by_hand(x, y, u, k, 5.0)[0] for x, y, u, k in zip(*states, (0.4, 0.5, 0.6), a, strict=True)]
    np.testing.assert_allclose(found.T, expected, rtol=1e-14)


def test_slopes_of_signals_follow_the_chain_rule():
    field = field_of(mixed())
    bound = field.bind(field.weights({"a": 2.0, "b": 5.0}))
    x, u, du, step = np.array([0.7, -1.3]), np.array([0.4]), np.array([0.9]), 1e-6
    rates = bound.all_rates(x, u, du)
    dx = bound.rates(x, u)
    later, earlier = (bound.all_values(x + s * dx, u + s * du) for s in (step, -step))
    np.testing.assert_allclose(rates, (later - earlier) / (2 * step), rtol=1e-7)


def test_jacobian_against_differences():
    field = field_of(mixed())
    bound = field.bind(field.weights({"a": 2.0, "b": 5.0}))
    x, u = np.array([0.7, -1.3]), np.array([0.4])
    found = bound.linear_part(x, u).toarray()
    whole = approx_fprime(np.append(x, u), lambda z: bound.rates(z[:2], z[2:]), 1e-7)
    np.testing.assert_allclose(found, whole, rtol=1e-5, atol=1e-5)


def test_large_systems_stay_sparse():
    n = 300
    names = [f"T{i}" for i in range(n)]
    rows = {m: [term(-2, m), term(1, names[i - 1]) if i else term(1)] for i, m in enumerate(names)}
    field = field_of(system(dict.fromkeys(names, 0), rows))
    bound = field.bind(field.weights({}))
    x = np.linspace(0, 1, n)
    np.testing.assert_allclose(bound.rates(x), -2 * x + np.append(1.0, x[:-1]), atol=1e-14)
    assert bound.jacobian(x).nnz == 2 * n - 1


def test_lorenz_rates():
    field = field_of(lorenz())
    x, y, z = 1.5, -2.0, 20.0
    rates = field.bind(field.weights({})).rates(np.array([x, y, z]))
    np.testing.assert_allclose(rates, [10 * (y - x), x * (28 - z) - y, x * y - 8 / 3 * z], rtol=1e-14)
