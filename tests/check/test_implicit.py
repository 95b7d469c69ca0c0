"""The sparse implicit run of large boards against runs by modes and step by step."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from patchplan.check import implicit, network
from patchplan.check.implicit import implicit_of
from patchplan.check.model import Model
from patchplan.check.network import build_network
from patchplan.check.simulate import simulate
from patchplan.circuit.records import Circuit
from patchplan.equation.waveform import Waveform
from tests.check.boards import OP_AMP, Board, oscillator, van_der_pol
from tests.check.test_linear import SINE, SQUARE, ZIGZAG, driven


@pytest.fixture
def all_large(monkeypatch: pytest.MonkeyPatch) -> None:
    """Every board is treated as one of many states."""
    monkeypatch.setattr(network, "DENSE_LIMIT", 0)
    monkeypatch.setattr(implicit, "MOST_CLIPPED", 0)


@pytest.mark.parametrize("waveform", [SINE, ZIGZAG, SQUARE], ids=["sine", "zigzag", "square"])
def test_a_large_board_runs_as_its_modes_say(waveform: Waveform, monkeypatch: pytest.MonkeyPatch) -> None:
    circuit = driven(waveform)
    by_modes = simulate(circuit)
    monkeypatch.setattr(network, "DENSE_LIMIT", 0)
    found = simulate(circuit)
    for net in ("x", "v", "xi"):
        assert found.of(net) == pytest.approx(by_modes.of(net), abs=2e-5)


def test_sparse_and_dense_models_agree(monkeypatch: pytest.MonkeyPatch) -> None:
    circuit = van_der_pol()
    dense = build_network(circuit)
    monkeypatch.setattr(network, "DENSE_LIMIT", 0)
    sparse = build_network(circuit)
    for name in ("voltage", "voltage_input", "rate", "rate_input"):
        np.testing.assert_array_equal(getattr(sparse, name).toarray(), getattr(dense, name))


@pytest.mark.usefixtures("all_large")
def test_boards_with_multipliers_are_left_to_the_full_model() -> None:
    assert implicit_of(Model(build_network(van_der_pol()))) is None


def growing(duration: float) -> Circuit:
    """x' = 100 x per millisecond from 1 V: at the rail within 25 us."""
    board = Board(time_scale=1e-3, duration=duration)
    board.integrator("x", [("xi", 1e3)], 10e-9, start=1.0)
    board.summer("xi", [("x", 10e3)], 10e3)
    board.node("x", "x", 1, 1.0)
    return board.circuit({"x": "x"})


@pytest.mark.usefixtures("all_large")
@pytest.mark.parametrize("duration", [26e-6, 20e-3], ids=["a little beyond", "beyond every float"])
def test_a_large_board_is_followed_to_its_first_clipped_output(duration: float) -> None:
    found = simulate(growing(duration), times=np.linspace(0.0, duration, 20001))
    assert found.failure.startswith("An output reaches its swing")
    assert found.times[-1] == pytest.approx(np.log(12.0) * 1e-5, rel=0.05)


def test_a_clipped_board_of_moderate_size_is_followed_through(monkeypatch: pytest.MonkeyPatch) -> None:
    clipped = oscillator(cycles=0.3, op_amp=replace(OP_AMP, high=5.0, low=-5.0))
    dense = simulate(clipped)
    monkeypatch.setattr(network, "DENSE_LIMIT", 0)
    found = simulate(clipped)
    assert not found.failure
    assert found.of("x") == pytest.approx(dense.of("x"), abs=2e-3)
