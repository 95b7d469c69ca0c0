"""Sources as numbers: sides of jumps, slopes, stand-ins and plain functions."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest

from patchplan.equation.problem import Recording
from patchplan.equation.syntax import parse_expression
from patchplan.equation.system import Source
from patchplan.equation.waveform import Waveform
from patchplan.reach.inputs import Inputs
from patchplan.reach.scalar import scalar_function
from tests.systems import system, term


def inputs_of(source, stand_ins=None, duration=4):
    return Inputs(system({"x": 0}, {"x": [term(1, "u")]}, sources=[source], duration=duration), stand_ins)


def test_both_sides_of_a_jump_and_slopes_between():
    inputs = inputs_of(Source("u", Waveform(parse_expression("t^2*step(t - 1)"))))
    assert inputs.edges.tolist() == [0.0, 1.0, 4.0]
    times = np.concatenate((np.linspace(0, 1, 11), np.linspace(1, 4, 31)))
    values, slopes = inputs.on_grid(times)
    np.testing.assert_allclose(values[0], np.append(np.zeros(11), times[11:] ** 2), atol=1e-10)
    # One-sided at the ends of a stretch: off by half of a thousandth of the spacing times the curvature.
    np.testing.assert_allclose(slopes[0], np.append(np.zeros(11), 2 * times[11:]), atol=2e-4)


def test_recording_and_stand_in_are_linear_between_rows():
    recording = inputs_of(Source("u", Waveform(None, Recording("a.csv", (0.0, 2.0, 4.0), (0.0, 4.0, 0.0)))))
    assert recording.at(1.0) == pytest.approx([2.0])
    assert recording.edges.tolist() == [0.0, 2.0, 4.0]
    levels = np.array([0.0, 1.5, 1.5, 4.0]), np.array([-1.0, -1.0, 1.0, 1.0])
    free = Source("u", None, (Fraction(-1), Fraction(1)))
    stand_in = inputs_of(free, {"u": levels})
    assert stand_in.edges.tolist() == [0.0, 1.5, 4.0]
    assert stand_in.values(np.array([1.4, 1.6])).tolist() == [[-1.0, 1.0]]
    assert inputs_of(Source("u", None, (Fraction(1), Fraction(2)))).at(3.0).tolist() == [1.5]


@pytest.mark.parametrize(
    "text",
    [
        "3*sin(2*pi*t) - t^2/4",
        "exp(-t)*cos(t)",
        "sqrt(t + 1) + abs(t - 2)",
        "tanh(t)^3",
        "-log(t + 2)",
        "sign(t - 2)*step(t - 1) + pulse(t, 1, 2) + ramp(t - 3)",
        "square(t, 1.3)*triangle(t, 1.7)/(2 + sawtooth(t, 1.1))",
    ],
)
def test_plain_functions_equal_the_waveform(text):
    tree = parse_expression(text)
    plain = scalar_function(tree)
    times = np.linspace(0.1, 4, 20)
    np.testing.assert_allclose([plain(t) for t in times.tolist()], Waveform(tree).values(times), rtol=1e-14)


def test_outside_its_domain_a_source_is_not_a_number():
    assert math.isnan(inputs_of(Source("u", Waveform(parse_expression("1/(t - 1)")))).at(1.0)[0])
