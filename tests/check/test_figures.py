"""Error figures of made-up signals whose errors are known."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from patchplan.check.figures import difference, error_base, node_peaks, settled
from patchplan.check.simulate import Traces
from patchplan.reach.records import Reference
from tests.check.boards import oscillator

TIMES = np.linspace(0.0, 20.0 * 2 * np.pi, 20001)
ALL = np.ones(len(TIMES), bool)


def test_an_oscillator_a_tenth_of_a_percent_fast_is_12_percent_off_after_20_cycles() -> None:
    # DESIGN section 4: 2*pi*20*1e-3 = 0.1257 of the amplitude, and still a good oscillator.
    found = difference(TIMES, np.sin(TIMES), np.cos(TIMES), np.sin(1.001 * TIMES), 1.0, ALL)
    assert found.largest == pytest.approx(12.56, abs=0.05)
    assert found.frequency == pytest.approx(0.1, abs=1e-4)
    assert found.stretched < 0.01


def test_an_amplitude_error_is_not_stretched_away() -> None:
    found = difference(TIMES, np.sin(TIMES), np.cos(TIMES), 1.02 * np.sin(TIMES), 1.0, ALL)
    assert found.largest == pytest.approx(2.0, abs=1e-4)
    assert found.stretched == pytest.approx(2.0, abs=1e-3)
    assert found.frequency == pytest.approx(0.0, abs=1e-6)
    assert found.rms == pytest.approx(2.0 / np.sqrt(2.0), rel=1e-3)


def test_rms_weighs_time_and_not_rows() -> None:
    times = np.concatenate([np.linspace(0.0, 1.0, 901), np.linspace(1.01, 10.0, 900)])
    error = np.where(times <= 1.0, 1.0, 0.0)
    found = difference(times, np.zeros(len(times)), np.zeros(len(times)), error, 1.0, np.ones(len(times), bool))
    assert found.rms == pytest.approx(100.0 * np.sqrt(0.1), rel=0.01)


def test_rows_right_after_a_jump_do_not_count() -> None:
    times = np.array([0.0, 1.0, 1.0, 1.001, 1.1, 2.0])
    values = np.array([[0.0, 0.0, 1.0, 1.0, 1.0, 1.0], [0.0, 1.0, 1.0, 1.0, 1.0, 2.0]])
    reference = Reference(("jumps", "runs"), times, values, np.zeros_like(values), (1.0,))
    assert settled(reference, "jumps", 1.0, 0.01).tolist() == [True, True, False, False, True, True]
    assert settled(reference, "runs", 1.0, 0.01).all()


def test_the_base_is_the_peak_or_half_the_swing_of_an_offset_node() -> None:
    circuit = oscillator()
    values = np.array([[1.0, 3.0], [-2.0, 1.0]])
    reference = Reference(("x", "v"), np.array([0.0, 1.0]), values, np.zeros((2, 2)))
    assert error_base(circuit, reference, "x") == 3.0
    shifted = replace(circuit, nodes={**circuit.nodes, "x": replace(circuit.nodes["x"], offset_volts=2.0)})
    assert error_base(shifted, reference, "x") == 1.0


def test_a_node_over_its_limit_is_named_with_time_and_cause() -> None:
    circuit = oscillator()
    volts = np.array([[0.0, -12.5, 3.0], [0.0, 1.0, 0.0], [0.0, 12.0, 0.0]])
    peaks = {p.node: p for p in node_peaks(circuit, Traces(np.array([0.0, 1e-3, 2e-3]), ("x", "v", "xi"), volts))}
    assert (peaks["x"].peak_volts, peaks["x"].time, peaks["x"].ok) == (12.5, 1e-3, False)
    assert peaks["x"].cause == "Node x reaches 12.5 V at 0.001 s of circuit time; the swing of op amp U1 is 12 V."
    assert peaks["v"].ok
    assert peaks["xi"].ok
