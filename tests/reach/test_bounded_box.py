"""Peak gains over a box of parameters against a dense grid, each gain integrated outside the tool."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.linalg import expm

from patchplan.equation.problem import Build, Parameter
from patchplan.equation.system import Source
from patchplan.reach.reference import find_reach
from tests.systems import knob, system, term

DURATION, STEPS = 20, 1000


def pair():
    """A damped resonance k driving a second one q; both may be moved."""
    rows = {
        "x": [term(1, "v")],
        "v": [term("-1/2", "v"), term(-1, "x", knobs=["k"]), term(1, "u")],
        "y": [term(1, "w")],
        "w": [term("-2/5", "w"), term(-1, "y", knobs=["q"]), term(1, "v")],
    }
    made = system(
        dict.fromkeys(rows, 0), rows,
        sources=[Source("u", None, (Fraction(-1), Fraction(1)))], watch=["y"], duration=DURATION,
        knobs=[knob("k", 1, 2, 3), knob("q", Fraction(3, 2), 2, Fraction(5, 2))],
    )  # fmt: skip
    ends = {"k": (1, 3), "q": (Fraction(3, 2), Fraction(5, 2))}
    box = tuple(Parameter(n, Fraction(2), Fraction(a), Fraction(b)) for n, (a, b) in ends.items())
    return replace(made, adjustable=box)


def gains(k, q):
    """Peak gains over the run of all four states, shape of k + (4,): integral of |impulse response|, Simpson's rule."""
    a = np.zeros((*np.shape(k), 4, 4))
    a[..., 0, 1] = a[..., 2, 3] = a[..., 3, 1] = 1
    a[..., 1, 0], a[..., 1, 1], a[..., 3, 2], a[..., 3, 3] = -k, -0.5, -q, -0.4
    step = expm(a * DURATION / STEPS)
    x = np.zeros((*np.shape(k), 4, 1))
    x[..., 1, 0] = 1
    total = np.abs(x)
    for i in range(1, STEPS + 1):
        x = step @ x
        total += (1 if i == STEPS else 2 + 2 * (i % 2)) * np.abs(x)
    return total[..., 0] * DURATION / STEPS / 3


@pytest.fixture(scope="module")
def grid():
    return gains(*np.meshgrid(np.linspace(1, 3, 41), np.linspace(1.5, 2.5, 21), indexing="ij"))


def test_no_point_of_a_dense_grid_is_above_the_range(grid):
    found = find_reach(pair(), {}, Build())
    for i, name in enumerate(("x", "v", "y", "w")):
        assert found.ranges[name].high == pytest.approx(-found.ranges[name].low, rel=1e-6)
        # The integral of a magnitude with kinks: Simpson's rule errs by 1e-4 at most.
        assert found.ranges[name].high > grid[..., i].max() * (1 - 1e-3)
    # The second resonance goes furthest where it meets the first, which is at no corner.
    corners = grid[[0, 0, -1, -1], [0, -1, 0, -1], 2].max()
    assert grid[..., 2].max() > 1.05 * corners
    at = {point.name: point.parameters for point in found.box.worst}["y"]
    assert found.ranges["y"].high == pytest.approx(gains(at["k"], at["q"])[2], rel=1e-3)
    assert found.box.climbed > 0


def test_a_signal_that_only_the_plan_has_is_found_over_the_box():
    def decay(rate, signals, **kept):
        source = Source("u", None, (Fraction(-1), Fraction(1)))
        return system({"x": 0}, {"x": [rate, term(1, "u")]}, signals=signals, sources=[source], duration=40, **kept)

    box = (Parameter("k", Fraction(2), Fraction(1), Fraction(3)),)
    plain = replace(decay(term(-1, "x", knobs=["k"]), {}, knobs=[knob("k", 1, 2, 3)]), adjustable=box)
    found = find_reach(decay(term(-2, "x"), {"z": [term(2, "x")]}), {}, Build(), uncertain=plain)
    # x' = -k x + u: the peak gain is 1 / k, so that z = 2 x goes to 2 where k = 1.
    assert found.box.parameters == ("k",)
    assert found.ranges["z"].high == pytest.approx(2, rel=1e-6)
    assert {point.name: point.parameters for point in found.box.worst}["z"] == {"k": 1.0}
    assert found.bounded[-1].names == ("x", "u", "z")
