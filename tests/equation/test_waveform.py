"""Functions of time, held against scipy.signal and numpy."""

import numpy as np
import pytest
from scipy import signal

from patchplan.equation.problem import Recording
from patchplan.equation.syntax import parse_expression
from patchplan.equation.waveform import Waveform

T = np.linspace(0.0, 5.0, 1237) + 1e-4


def wave(text):
    return Waveform(parse_expression(text))


def test_square_is_scipys_square():
    assert np.array_equal(wave("square(t, 0.7)").values(T), signal.square(2 * np.pi * T / 0.7))


def test_sawtooth_is_scipys_sawtooth():
    assert np.allclose(wave("sawtooth(t, 0.7)").values(T), signal.sawtooth(2 * np.pi * T / 0.7), atol=1e-12)


def test_triangle_is_scipys_symmetric_sawtooth():
    expected = signal.sawtooth(2 * np.pi * T / 0.7, width=0.5)
    assert np.allclose(wave("triangle(t, 0.7)").values(T), expected, atol=1e-12)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("3*sin(2*t + 1)^2 - exp(-t)/(t + 1)", 3 * np.sin(2 * T + 1) ** 2 - np.exp(-T) / (T + 1)),
        ("tanh(t) + log(t + 2)*sqrt(t) + abs(t - 1)", np.tanh(T) + np.log(T + 2) * np.sqrt(T) + np.abs(T - 1)),
        ("ramp(t - 2) - pulse(t, 1, 0.5)", np.maximum(T - 2, 0) - ((T >= 1) & (T < 1.5))),
        ("2^t + tan(t/4) + sign(t - 3)*pi", 2.0**T + np.tan(T / 4) + np.sign(T - 3) * np.pi),
        ("7", np.full_like(T, 7.0)),
    ],
)
def test_formulas_are_numpys(text, expected):
    assert np.allclose(wave(text).values(T), expected, rtol=1e-13, atol=1e-13)


@pytest.mark.parametrize(
    ("text", "jumps"),
    [
        ("step(t - 0.5) + sin(t)", [0.5]),
        ("step(3*t - 1)", [1 / 3]),
        ("square(t, 2)", [1, 2, 3, 4]),
        ("sawtooth(t - 0.5, 2)", [0.5, 2.5, 4.5]),
        ("triangle(2*t, 4)", [1, 2, 3, 4]),
        ("pulse(t, 1, 0.25)*t", [1, 1.25]),
        ("abs(sin(t))", [np.pi]),
        ("step(t^2 - 2)", [np.sqrt(2)]),
        ("cos(t)", []),
        ("step(t)", []),
    ],
)
def test_jumps_are_where_the_argument_meets_an_edge(text, jumps):
    assert np.allclose(wave(text).jumps(5.0), jumps, rtol=1e-12)


@pytest.mark.parametrize("text", ["step(t - 0.3)", "square(t, 0.1)", "sawtooth(t, 0.3)", "pulse(t, 0.1, 0.2)"])
def test_values_are_right_of_a_jump_and_before_is_left_of_it(text):
    jumps = np.array(wave(text).jumps(1.0))
    near = 1e-7
    assert jumps.size
    assert np.allclose(wave(text).values(jumps), wave(text).values(jumps + near), atol=1e-5)
    assert np.allclose(wave(text).before(jumps), wave(text).values(jumps - near), atol=1e-5)
    assert np.any(wave(text).before(jumps) != wave(text).values(jumps))


def test_a_step_at_zero_is_on_at_zero_and_off_before():
    assert wave("step(t)").values(np.zeros(1))[0] == 1.0
    assert wave("step(t)").before(np.zeros(1))[0] == 0.0


def test_a_recording_is_linear_between_rows_and_breaks_where_its_slope_does():
    recorded = Waveform(recording=Recording("road.csv", (0.0, 1.0, 2.0, 4.0), (0.0, 1.0, 2.0, 0.0)))
    assert np.allclose(recorded.values(np.array([0.5, 3.0])), [0.5, 1.0])
    assert recorded.jumps(4.0) == (2.0,)
