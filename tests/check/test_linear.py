"""Runs by modes against the step-by-step run and a matrix exponential."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.linalg import expm

from patchplan.check import simulate as module
from patchplan.check.linear import _phi, modes_of
from patchplan.check.model import Model
from patchplan.check.network import build_network
from patchplan.check.simulate import simulate
from patchplan.circuit.records import Circuit
from patchplan.equation.problem import Recording
from patchplan.equation.system import Source
from patchplan.equation.tree import Binary, Call, Name, Number
from patchplan.equation.waveform import Waveform
from tests.check.boards import OP_AMP, Board, oscillator, van_der_pol

SINE = Waveform(Call("sin", (Binary("*", Number(Fraction(5)), Name("t")),)))
ZIGZAG = Waveform(recording=Recording("u.csv", (0.0, 0.3, 1.7, 2.0, 9.0), (0.0, 1.0, -1.0, 0.5, 0.5)))
SQUARE = Waveform(Call("square", (Name("t"), Number(Fraction(2)))))


def driven(waveform: Waveform) -> Circuit:
    board = Board(time_scale=1e-4, duration=9e-4)
    board.add("source", "u", value=3.0, model="u")
    board.integrator("x", [("v", 10e3), ("x", 20e3)], 10e-9, start=-2.0)
    board.integrator("v", [("xi", 10e3), ("u", 15e3)], 10e-9)
    board.summer("xi", [("x", 10e3)], 10e3)
    for net in ("x", "v", "xi"):
        board.node(net, net, 1, 1.0)
    return board.circuit({}, sources={"u": Source("u", waveform)})


@pytest.mark.parametrize("waveform", [SINE, ZIGZAG, SQUARE], ids=["sine", "zigzag", "square"])
def test_modes_give_what_the_steps_give(waveform: Waveform, monkeypatch: pytest.MonkeyPatch) -> None:
    circuit = driven(waveform)
    assert modes_of(Model(build_network(circuit))) is not None
    by_modes = simulate(circuit)
    monkeypatch.setattr(module, "modes_of", lambda model: None)
    by_steps = simulate(circuit, tolerance=1e-9)
    assert by_modes.of("x") == pytest.approx(by_steps.of("x"), abs=2e-5)
    assert by_modes.of("xi") == pytest.approx(by_steps.of("xi"), abs=2e-5)


def test_phi_functions_are_those_of_the_exponential() -> None:
    # phi_1..3 of z stand in the first row of exp of a nilpotent extension (Sidje 1998).
    for z in (-30.0, -1.01, -0.99, -1e-3, 0.0, 0.5, 0.3 + 0.9j, 2.0j):
        block = np.diag(np.ones(3), 1).astype(complex)
        block[0, 0] = z
        wanted = expm(block)[0, 1:]
        assert [complex(p) for p in _phi(np.array(z, complex))] == pytest.approx(wanted, rel=1e-12)


def test_boards_with_multipliers_and_clipped_boards_are_run_step_by_step(monkeypatch: pytest.MonkeyPatch) -> None:
    assert modes_of(Model(build_network(van_der_pol()))) is None
    clipped = oscillator(op_amp=replace(OP_AMP, high=5.0, low=-5.0))
    by_default = simulate(clipped)
    monkeypatch.setattr(module, "modes_of", lambda model: None)
    assert np.array_equal(simulate(clipped).volts, by_default.volts)
