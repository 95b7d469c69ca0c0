"""Nonlinear runs along a recording against scipy's solver restarted at every row."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from scipy.integrate import solve_ivp

from patchplan.equation.problem import Build, Recording
from patchplan.equation.system import Source
from patchplan.equation.waveform import Waveform
from patchplan.reach.curves import resample
from patchplan.reach.field import field_of
from patchplan.reach.inputs import Inputs
from patchplan.reach.nominal import uniform_grid
from patchplan.reach.reference import find_reach
from patchplan.reach.rows import solve_rows
from tests.systems import knob, system, term

ROWS = np.linspace(0, 6, 151)
HEIGHTS = np.random.default_rng(3).normal(size=151)
SOURCE = Source("u", Waveform(None, Recording("a.csv", tuple(ROWS.tolist()), tuple(HEIGHTS.tolist()))))


def hardening(stiffness=1):
    """x'' = -x - x^2 x' - c x^3 + u."""
    return system(
        {"x": 1, "v": 0},
        {
            "x": [term(1, "v")],
            "v": [term(-1, "x"), term(-1, "x", "x", "v"), term(-stiffness, "x", "x", "x", knobs=["c"]), term(1, "u")],
        },
        sources=[SOURCE],
        knobs=[knob("c", 0, 1, 2)],
        duration=6,
    )


def by_rows(c):
    def slopes(t, x):
        return [x[1], -x[0] - x[0] ** 2 * x[1] - c * x[0] ** 3 + np.interp(t, ROWS, HEIGHTS)]

    x, found = [1.0, 0.0], [[1.0, 0.0]]
    for a, b in pairwise(ROWS):
        x = solve_ivp(slopes, (a, b), x, "DOP853", rtol=1e-11, atol=1e-12).y[:, -1]
        found.append(x)
    return np.array(found).T


def test_reference_along_a_recording():
    reference = find_reach(hardening(), {}, Build()).reference
    found = resample(reference.times, reference.values[:2], reference.rates[:2], ROWS)
    np.testing.assert_allclose(found, by_rows(1.0), atol=2e-7)


def test_many_runs_have_their_own_coefficients():
    made = hardening()
    field, inputs = field_of(made), Inputs(made)
    c, times = np.array([0.0, 0.7, 2.0]), uniform_grid(inputs.edges, 600)
    bound = field.bind(field.weights({"c": c}))
    start = np.repeat([[1.0], [0.0]], 3, axis=1)
    states = solve_rows(bound, start, inputs, times, tolerance=1e-9, floor=np.full(2, 1e-9))
    assert states.shape == (2, 3, times.size)
    for j, value in enumerate(c):
        np.testing.assert_allclose(
            states[:, j][:, np.isin(times, ROWS[:-1])][:, ::2][:, 1:], by_rows(value)[:, 1:-1], atol=1e-7
        )


def test_stiff_runs_are_handed_back():
    made = hardening(stiffness=10**12)
    field, inputs = field_of(made), Inputs(made)
    times = uniform_grid(inputs.edges, 600)
    bound = field.bind(field.weights({"c": 1.0}))
    assert solve_rows(bound, np.array([1.0, 0.0]), inputs, times, tolerance=1e-9, floor=np.full(2, 1e-9)) is None
