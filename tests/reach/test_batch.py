"""Many linear runs on common steps against the exact solution of each."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from scipy import signal

from patchplan.equation.system import Source
from patchplan.equation.tree import Binary, Call, Name, Number
from patchplan.equation.waveform import Waveform
from patchplan.reach.batch import march
from patchplan.reach.field import field_of
from patchplan.reach.inputs import Inputs
from patchplan.reach.solve import GrowsWithoutBoundError
from tests.systems import knob, system, term


def damped(source):
    """x'' = -c x' - 4 x + u, c a knob."""
    return system(
        {"x": 1, "v": 0},
        {"x": [term(1, "v")], "v": [term(-4, "x"), term(-1, "v", knobs=["c"]), term(1, "u")]},
        sources=[source],
        knobs=[knob("c", 0, 1, 2)],
        duration=10,
    )


def test_every_run_is_its_own_step_response():
    step = Waveform(Call("step", (Binary("-", Name("t"), Number(Fraction(2))),)))
    made = damped(Source("u", step))
    field, inputs, c = field_of(made), Inputs(made), np.array([0.1, 0.5, 1.0])
    ends = np.unique(np.append(np.linspace(0, 10, 201), inputs.edges))
    found = march(field.bind(field.weights({"c": c})), np.array([1.0, 0.0]), inputs, ends)
    for j, damping in enumerate(c):
        plant = signal.StateSpace([[0, 1], [-4, -damping]], [[0], [1]], np.eye(2), np.zeros((2, 1)))
        free = signal.lsim(plant, 0 * ends, ends, X0=[1.0, 0.0])[1]
        stepped = signal.step(plant, T=np.linspace(0, 8, 161))[1]
        later = np.array([np.interp(ends - 2, np.linspace(0, 8, 161), s, left=0.0) for s in stepped.T])
        # Order 5 with w h = 0.1: (w h)^6 / 7200 for each step.
        np.testing.assert_allclose(found[:, j], free.T + later, atol=1e-7)


def test_a_growing_run_says_when():
    made = system({"x": 1}, {"x": [term(1, "x", knobs=["a"])]}, knobs=[knob("a", 1, 1, 900)], duration=2)
    field = field_of(made)
    with pytest.raises(GrowsWithoutBoundError) as caught:
        march(
            field.bind(field.weights({"a": np.array([1.0, 900.0])})), np.ones(1), Inputs(made), np.linspace(0, 2, 2001)
        )
    # exp(900 t) leaves the floats at t = 709.8 / 900.
    assert caught.value.time == pytest.approx(709.8 / 900, abs=2e-3)
