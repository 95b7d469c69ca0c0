"""The nodal model against closed forms."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from patchplan.check.model import Model
from patchplan.check.network import build_network
from patchplan.check.start import hold_state
from patchplan.circuit.records import GROUND, Circuit
from tests.check.boards import FORMULAS, OP_AMP, Board, oscillator, van_der_pol


def poles(circuit: Circuit) -> np.ndarray:
    """Eigenvalues of the board around zero volts [1/s]."""
    model = Model(build_network(circuit))
    network = model.network
    return np.linalg.eigvals(
        model.jacobian(np.zeros(len(network.states)), model.push(np.ones(network.rate_input.shape[1])))
    )


def figures(**more: float):
    return replace(OP_AMP, **{"bias": 0.0, **more})


def test_integrator_with_finite_gain_and_bandwidth_has_the_two_exact_poles() -> None:
    # Franco 2019, the op amp's gain-bandwidth product; cases/formulas.json, integrator_A0_and_GBW.
    known = FORMULAS["integrator_A0_and_GBW"]
    board = Board(op_amp=figures(gain=known["A0"], gain_bandwidth=2 * math.pi * known["ft_Hz"]))
    board.integrator("y", [(GROUND, known["R"])], known["C"], hold=False)
    found = np.sort(poles(board.circuit({})).real)
    assert found == pytest.approx(sorted(known["poles_rad_s"]), rel=1e-9)


def khn(q: float, ratio: float, noise_gain: int, gain: float) -> Circuit:
    """State-variable filter: a summer of two or three equal resistors whose plus input takes the band-pass output."""
    ohm, farad = 10e3, 10e-9
    board = Board(op_amp=figures(gain=gain, gain_bandwidth=1.0 / (ohm * farad * ratio)))
    board.integrator("bp", [("hp", ohm)], farad, hold=False)
    board.integrator("lp", [("bp", ohm)], farad, hold=False)
    for net in ("lp", "hp", GROUND)[:noise_gain]:
        board.add("resistor", net, "minus", value=10e3)
    share = 1.0 / (noise_gain * q)
    board.add("potentiometer", "bp", "plus", GROUND, value=1.0 - share, total=10e3)
    board.add("op amp", "plus", "minus", "hp")
    return board.circuit({})


# The cases with n = 2 have an ideal summer, which is no board.
@pytest.mark.parametrize("case", [c for c in FORMULAS["biquad_Q_enhancement"]["cases"] if c["n"] > 2], ids=str)
def test_finite_bandwidth_raises_the_q_of_a_biquad(case) -> None:
    # Thomas 1971, Akerberg and Mossberg 1974: exact roots of cases/formulas.json, biquad_Q_enhancement.
    found = poles(khn(case["Q"], case["w0_over_wt"], case["summer_noise_gain"], 1e13))
    slow = found[np.argsort(np.abs(found))[:2]][0]
    assert abs(slow) * 1e-4 == pytest.approx(case["exact_w0eff_over_w0"], rel=1e-7)
    # Q is a small difference; where it nearly cancels, its inverse is what the digits hold.
    assert -2 * slow.real / abs(slow) == pytest.approx(1 / case["exact_Q_eff"], rel=1e-6, abs=1e-9)


def test_finite_gain_lowers_the_q_of_a_biquad() -> None:
    # cases/formulas.json, biquad_Q_enhancement, with A0 = 1e4: holds the leak of all three op amps.
    known = FORMULAS["biquad_Q_enhancement"]["with_A0_1e4_Q10_e1e-3_G2"]
    found = poles(khn(10, 1e-3, 2, 1e4))
    slow = found[np.argsort(np.abs(found))[:2]][0]
    assert -abs(slow) / (2 * slow.real) == pytest.approx(known["exact_Q_eff"], rel=1e-3)


def test_oscillator_grows_by_the_excess_phase() -> None:
    # cases/formulas.json, harmonic_oscillator_growth.
    known = FORMULAS["harmonic_oscillator_growth"]
    ohm, farad = 10e3, 10e-9
    fast = figures(gain=1e13, gain_bandwidth=1.0 / (ohm * farad * known["w0_over_wt"]))
    found = poles(oscillator(ohm=ohm, farad=farad, op_amp=fast))
    slow = found[np.argsort(np.abs(found))[0]] * ohm * farad
    assert slow.real == pytest.approx(known["exact_sigma_over_w0"], rel=1e-6)
    assert abs(slow.imag) == pytest.approx(known["exact_frequency_ratio"], rel=1e-6)


def test_summer_with_offset_and_bias_stands_at_the_published_output() -> None:
    # Sedra and Smith, problem 2.106; cases/formulas.json, summer_output_offset.
    known = FORMULAS["summer_output_offset"]
    board = Board(run="free", op_amp=figures(gain=1e12, bias=known["Ib"]))
    board.add("reference", "vos", value=known["Vos"])
    board.add("resistor", GROUND, "in", value=known["R"])
    board.add("resistor", "in", "y", value=known["Rf"])
    board.add("op amp", "vos", "in", "y")
    assert hold_state(board.circuit({}))["y"] == pytest.approx(known["Vo_uncompensated"], rel=1e-8)


def test_loaded_potentiometer_gives_the_loaded_ratio() -> None:
    # cases/formulas.json, loaded_divider.
    known = FORMULAS["loaded_divider"]
    board = Board(run="free")
    board.add("potentiometer", "vref", "w", GROUND, value=1.0 - known["a"], total=known["Rp"])
    board.add("resistor", "w", GROUND, value=known["RL"])
    assert hold_state(board.circuit({}))["w"] == pytest.approx(10.0 * known["a_eff"], rel=1e-9)


def test_hold_gives_minus_r2_over_r1_of_the_reference() -> None:
    board = Board(op_amp=figures(gain=1e9))
    board.integrator("y", [("vref", 10e3)], 10e-9, start=5.0)
    assert hold_state(board.circuit({}))["y"] == pytest.approx(5.0, rel=1e-6)


def test_inputs_that_stay_on_in_hold_pull_the_start_value() -> None:
    # DESIGN: 5 V wanted, -3 V got: a 10 k start network with a 12.5 k leg from 10 V left on the summing node.
    board = Board(op_amp=figures(gain=1e9))
    board.integrator("y", [], 10e-9, start=5.0)
    board.add("resistor", "vref", "y_hold", value=12.5e3)
    assert hold_state(board.circuit({}))["y"] == pytest.approx(-3.0, rel=1e-6)


def test_free_run_starts_where_the_circuit_says() -> None:
    board = Board(run="free")
    board.integrator("y", [("vref", 10e3)], 10e-9, hold=False)
    assert hold_state(board.circuit({}, start={"y": 3.0}))["y"] == pytest.approx(3.0, rel=1e-4)


def test_a_cut_wire_is_named_and_does_no_harm() -> None:
    board = Board(run="free")
    board.add("resistor", "vref", "a", value=10e3)
    board.add("resistor", "loose", "looser", value=10e3)
    circuit = board.circuit({})
    network = build_network(circuit)
    assert network.warnings == ("Net loose is connected to no output, source or ground.",)
    assert hold_state(circuit)["a"] == pytest.approx(10.0)


def test_two_outputs_on_one_net_are_named() -> None:
    board = Board(run="free")
    board.add("op amp", GROUND, "in", "vref")
    assert "drives net vref" in build_network(board.circuit({})).warnings[0]


def test_capacitors_in_a_loop_share_their_charge() -> None:
    # Two capacitors in parallel behind one resistor: one time constant R*(C1 + C2).
    board = Board(run="free")
    board.add("resistor", "vref", "a", value=10e3)
    board.add("capacitor", "a", GROUND, value=10e-9)
    board.add("capacitor", "a", GROUND, value=20e-9)
    slow = max(poles(board.circuit({})).real)
    assert slow == pytest.approx(-1.0 / (10e3 * 30e-9), rel=1e-4)


@pytest.mark.parametrize("swing", [1.0, 13.0])
def test_jacobian_is_the_derivative_of_the_rates(swing: float) -> None:
    model = Model(build_network(van_der_pol()))
    state = np.linspace(-swing, swing, len(model.network.states))
    step, inputs = 1e-6, model.push(np.ones(1))
    numeric = np.array([
        (model.rates(state + step * e, inputs) - model.rates(state - step * e, inputs)) / (2 * step)
        for e in np.eye(len(state))
    ]).T  # fmt: skip
    assert model.jacobian(state, inputs) == pytest.approx(numeric, rel=1e-5, abs=1e-7 * np.abs(numeric).max())
