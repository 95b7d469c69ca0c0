"""Source waveforms in an outside simulator against closed forms."""

from fractions import Fraction

import numpy as np
import pytest
from scipy.signal import sawtooth, square

from patchplan.circuit.records import Circuit, NodeMap, Part
from patchplan.circuit.spice import spice_text
from patchplan.equation.problem import Recording
from patchplan.equation.syntax import parse_expression
from patchplan.equation.system import Source
from patchplan.equation.waveform import Waveform
from tests.circuit.boards import oscillator
from tests.circuit.spice import run_ngspice

SCALE, VOLTS, OFFSET, DURATION = 2e-3, -2.0, 0.5, 5.0


def source_board(source: Source) -> Circuit:
    model = oscillator()
    part = Part("SRC1", "source", ("u",), VOLTS, model="u")
    node = NodeMap("u", "u", -1, -VOLTS, OFFSET, 12.0, "source")
    return Circuit((part,), {"u": node}, {}, model.op_amp, model.multiplier, (-15.0, 15.0), SCALE, DURATION * SCALE,
                   "once", {"u": source})  # fmt: skip


def played(source: Source) -> tuple[np.ndarray, np.ndarray]:
    """Problem times and the source's signal in problem units."""
    nodes, time = run_ngspice(spice_text(source_board(source), {}, max_step=DURATION * SCALE / 2000))
    return time / SCALE, (nodes["u"] - OFFSET) / VOLTS


def step(t):
    return np.where(t >= 0, 1.0, 0.0)


FORMULAS = {
    "cos(3*t)*exp(-t/2) - 1/(t + 1)": lambda t: np.cos(3 * t) * np.exp(-t / 2) - 1 / (t + 1),
    "sqrt(t + 1) + log(t + 2) + tanh(t - 2)": lambda t: np.sqrt(t + 1) + np.log(t + 2) + np.tanh(t - 2),
    "(t - 2)^3 + (t - 2)^2 - t^1.5 + (t + 1)^(-2)": lambda t: (t - 2) ** 3 + (t - 2) ** 2 - t**1.5 + (t + 1) ** -2.0,
    "abs(sin(2*t))*2^t/10": lambda t: abs(np.sin(2 * t)) * 2**t / 10,
    "-785*step(t - 0.5)": lambda t: -785 * step(t - 0.5),
    "pulse(t, 1, 0.5)*(2 + sin(t)) + ramp(t - 3)": lambda t: (
        (step(t - 1) - step(t - 1.5)) * (2 + np.sin(t)) + np.maximum(t - 3, 0)
    ),
    "square(t, 1.3)": lambda t: square(2 * np.pi * t / 1.3),
    "triangle(t, 2) + sawtooth(t, 0.7)": lambda t: sawtooth(np.pi * t, 0.5) + sawtooth(2 * np.pi * t / 0.7),
    "step(sin(4*t)) + ramp(sin(4*t))": lambda t: step(np.sin(4 * t)) + np.maximum(np.sin(4 * t), 0),
    "square(t - 0.2, 1)*cos(t)": lambda t: square(2 * np.pi * (t - 0.2)) * np.cos(t),
}


@pytest.mark.parametrize("text", FORMULAS)
def test_formula(text):
    source = Source("u", Waveform(parse_expression(text)))
    t, found = played(source)
    wanted = FORMULAS[text](t)
    peak = np.abs(wanted).max()
    # A jump takes 1e-6 of the run; a time within a few of these of it may be on either side.
    apart = np.ones(t.shape, bool)
    for jump in source.waveform.jumps(DURATION):
        apart &= np.abs(t - jump) > 3e-6 * DURATION
    assert np.abs(found - wanted)[apart].max() < 1e-4 * peak
    assert apart.mean() > 0.8


def test_a_step_at_zero_is_there_from_the_start():
    t, found = played(Source("u", Waveform(parse_expression("step(t)"))))
    assert found == pytest.approx(np.ones(len(t)))


def test_recording_is_cut_to_the_run_and_linear_between_rows():
    times, values = (-1.0, 0.5, 2.0, 2.1, 9.0), (0.0, 3.0, -1.0, 4.0, 0.0)
    t, found = played(Source("u", Waveform(recording=Recording("u.csv", times, values))))
    assert found == pytest.approx(np.interp(t, times, values), abs=1e-6)


def test_bounds_alone_are_played_as_their_middle():
    t, found = played(Source("u", None, within=(Fraction(-1), Fraction(4))))
    assert found == pytest.approx(np.full(len(t), 1.5))
