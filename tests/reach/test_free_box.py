"""Bounded inputs of nonlinear equations over a box, against every switching waveform of a grid at every corner."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from itertools import product

import numpy as np
import pytest

from patchplan.equation.problem import Build, Parameter
from patchplan.equation.system import Source
from patchplan.reach.reference import find_reach
from tests.systems import knob, system, term

DURATION, SEGMENTS, STEPS = 8, 8, 400


def hardening():
    """A hardening spring with two adjustable coefficients, its force known by its bounds; two signals watched."""
    rate = [term("-3/10", "v"), term(-1, "x", knobs=["k"]), term(-1, "x", "x", "x", knobs=["b"]), term(1, "u")]
    box = {"k": (Fraction(1, 2), Fraction(2)), "b": (Fraction(1, 5), Fraction(1))}
    knobs = [knob(name, low, (low + high) / 2, high) for name, (low, high) in box.items()]
    made = system(
        {"x": 0, "v": 0}, {"x": [term(1, "v")], "v": rate}, sources=[Source("u", None, (Fraction(-1), Fraction(1)))],
        watch=["x", "v"], knobs=knobs, duration=DURATION,
    )  # fmt: skip
    return replace(made, adjustable=tuple(Parameter(n, sum(e) / 2, *e) for n, e in box.items()))


@pytest.fixture(scope="module")
def brute():
    """Largest |x| and |v| over all 256 switching waveforms and 4 corners, by the classical Runge-Kutta method."""
    waves = np.array(list(product((-1.0, 1.0), repeat=SEGMENTS)))
    corners = np.array(list(product((0.5, 2.0), (0.2, 1.0))))
    u = np.repeat(waves, len(corners), axis=0)
    k, b = np.tile(corners, (len(waves), 1)).T
    state, top, h = np.zeros((2, len(u))), np.zeros((2, len(u))), DURATION / STEPS

    def rates(s, force):
        return np.array([s[1], -0.3 * s[1] - k * s[0] - b * s[0] ** 3 + force])

    for i in range(STEPS):
        force = u[:, i * SEGMENTS // STEPS]
        a = rates(state, force)
        c = rates(state + h / 2 * a, force)
        d = rates(state + h / 2 * c, force)
        state = state + h / 6 * (a + 2 * c + 2 * d + rates(state + h * d, force))
        top = np.maximum(top, np.abs(state))
    return top.max(axis=1)


def test_no_switching_waveform_at_any_corner_goes_beyond_the_range(brute):
    found = find_reach(hardening(), {}, Build())
    for name, peak in zip(("x", "v"), brute, strict=True):
        # The margin for the tolerance of parts does not count.
        assert found.ranges[name].peak - found.ranges[name].margin >= peak
    assert found.box.waveforms > 1
    assert found.box.runs == found.box.waveforms * (found.box.corners + found.box.sampled) + found.box.climbed
