"""Runs of hand-built boards against closed forms and an independent solver."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from patchplan.check.simulate import simulate
from patchplan.circuit.records import GROUND
from patchplan.equation.problem import Recording
from patchplan.equation.reader import read_problem
from patchplan.equation.system import Source
from patchplan.equation.tree import Binary, Call, Name, Number
from patchplan.equation.waveform import Waveform
from patchplan.pipeline import plan as make_plan
from tests.check.boards import FORMULAS, OP_AMP, Board, oscillator, van_der_pol

IDEAL = {"gain": False, "bandwidth": False, "slew": False, "bias": False, "multiplier": False}
T = Name("t")


def source(waveform: Waveform) -> dict[str, Source]:
    return {"u": Source("u", waveform)}


def call(function: str, *arguments: object) -> Waveform:
    return Waveform(
        Call(function, tuple(a if isinstance(a, Name | Binary) else Number(Fraction(a)) for a in arguments))
    )


def test_integrator_runs_down_as_the_formula_says() -> None:
    # Franco 2019, eq. 1; cases/formulas.json, integrator_ideal.
    known = FORMULAS["integrator_ideal"]
    board = Board(run="free", duration=known["t"])
    board.add("source", "u", value=known["vi"], model="u")
    board.integrator("y", [("u", known["R"])], known["C"], hold=False)
    board.node("y", "y", 1, 1.0)
    run = simulate(board.circuit({}, sources=source(call("step", T))), **IDEAL)
    assert run.of("y")[-1] == pytest.approx(known["vo"], rel=1e-5)


def test_lossy_integrator_droops_as_the_formula_says() -> None:
    # First-order equation; cases/formulas.json, lossy_integrator_time.
    known = FORMULAS["lossy_integrator_time"]
    ohm, leak, farad = 1e6, 1e6, 100e-9
    board = Board(run="free", duration=known["t_over_tau"] * leak * farad)
    board.integrator("y", [("vref", ohm)], farad, leak=leak, hold=False)
    run = simulate(board.circuit({}), **IDEAL)
    ramp = -10.0 * board.duration / (ohm * farad)
    assert 1.0 - run.of("y")[-1] / ramp == pytest.approx(known["relative_error"], rel=1e-5)


def test_offset_and_bias_drift_add() -> None:
    # Conant, Analog Dialogue; cases/formulas.json, integrator_drift.
    known = FORMULAS["integrator_drift"]
    board = Board(run="free", duration=60.0, op_amp=replace(OP_AMP, gain=1e12, bias=known["Ib"]))
    board.add("reference", "vos", value=known["Vos"])
    board.add("resistor", GROUND, "in", value=known["R"])
    board.add("capacitor", "in", "y", value=known["C"])
    board.add("op amp", "vos", "in", "y")
    run = simulate(board.circuit({}))
    assert run.of("y")[-1] - run.of("y")[0] == pytest.approx(known["drift_after_60s_V"], rel=1e-5)


@pytest.mark.parametrize(("frequency", "slewing"), [(0.5, False), (2.0, True)])
def test_a_sine_above_the_full_power_bandwidth_is_slew_limited(frequency: float, slewing: bool) -> None:
    # f = SR/(2 pi Vp); cases/formulas.json, slew_full_power_bandwidth.
    known = FORMULAS["slew_full_power_bandwidth"]
    turn = known["f_Hz"] * frequency
    board = Board(run="free", duration=3.0 / turn)
    board.op_amp = replace(OP_AMP, slew=known["SR_V_per_s"], gain_bandwidth=2e9, gain=1e6)
    board.add("source", "u", value=known["Vp_V"], model="u")
    board.summer("y", [("u", 10e3)], 10e3)
    wave = Waveform(Call("sin", (Binary("*", Number(Fraction(2 * math.pi * turn)), T),)))
    run = simulate(board.circuit({}, sources=source(wave)))
    steepest = np.abs(np.gradient(run.of("y"), run.times))[10:].max()
    wanted = known["SR_V_per_s"] * (1.0 if slewing else frequency)
    assert steepest == pytest.approx(wanted, rel=0.01)


def test_van_der_pol_board_follows_an_independent_solver() -> None:
    # Van der Pol 1926; scipy's DOP853 as the judge.
    board = van_der_pol()
    run = simulate(board, **IDEAL)
    truth = solve_ivp(lambda t, y: [y[1], (1 - y[0] ** 2) * y[1] - y[0]], (0, 20), [2, 0], method="DOP853", rtol=1e-11,
                      atol=1e-11, t_eval=np.minimum(run.times / board.time_scale, 20.0))  # fmt: skip
    assert run.of("x") / -4.0 == pytest.approx(truth.y[0], abs=1e-4)
    assert run.of("v") / 2.5 == pytest.approx(truth.y[1], abs=1e-4)


def test_oscillator_grows_by_the_excess_phase_over_its_run() -> None:
    # cases/formulas.json, harmonic_oscillator_growth: 1.262647 % a cycle at w0/wt = 1e-3.
    known = FORMULAS["harmonic_oscillator_growth"]
    amp = replace(OP_AMP, gain=1e12, gain_bandwidth=1e4 / known["w0_over_wt"], bias=0.0)
    board = oscillator(cycles=5.25, op_amp=amp)
    run = simulate(board)
    start, end = (np.abs(run.of("x")[rows]).max() for rows in (slice(0, 2), slice(-60, None)))
    growth = (end / start) ** 0.2 - 1.0
    assert 100 * growth == pytest.approx(known["amplitude_growth_per_cycle_percent"], rel=2e-3)


@pytest.mark.parametrize("cause", ["gain", "bandwidth", "bias", "slew", "switches"])
def test_each_cause_makes_a_difference_of_its_own(cause: str) -> None:
    # Figures poor enough that each one shows.
    amp = replace(OP_AMP, gain=1e4, gain_bandwidth=2e7, slew=1e5, bias=1e-6)
    board = oscillator(op_amp=amp)
    nominal, without = simulate(board), simulate(board, **{cause: False})
    assert np.abs(nominal.of("x") - without.of("x")).max() > 5e-3


def test_an_overload_is_held_by_the_swing() -> None:
    board = Board(run="free", duration=10.0, op_amp=replace(OP_AMP, gain_bandwidth=1e6))
    board.integrator("y", [("vref", 100e3)], 1e-6, hold=False)
    run = simulate(board.circuit({}))
    assert run.failure == ""
    assert -12.0 - 10.0 <= run.of("y").min() < -12.0


def test_a_jump_between_two_rows_of_a_recording_is_seen_on_its_own_side() -> None:
    board = Board(run="free", duration=2.0)
    board.add("source", "u", value=3.0, model="u")
    board.node("u", "u", 1, 3.0)
    recording = Recording("u.csv", (0.0, 1.0, 2.0), (0.0, 1.0, 0.0))
    circuit = board.circuit({}, sources=source(Waveform(recording=recording)))
    times = np.array([0.0, 0.5, 1.0, 1.0, 1.5, 2.0])
    assert simulate(circuit, times=times).of("u") == pytest.approx([0.0, 1.5, 3.0, 3.0, 1.5, 0.0], abs=1e-6)
    step = {"u": (np.array([0.0, 1.0, 1.0, 2.0]), np.array([0.0, 0.0, 1.0, 1.0]))}
    seen = simulate(circuit, times=times, waveforms=step).of("u")
    assert seen == pytest.approx([0.0, 0.0, 0.0, 3.0, 3.0, 3.0], abs=1e-6)


def test_a_formula_is_tabulated_to_nine_digits() -> None:
    board = Board(run="free", duration=1.0)
    board.add("source", "u", value=2.0, model="u")
    board.node("u", "u", 1, 2.0)
    wave = Waveform(Call("sin", (Binary("*", Number(Fraction(40)), T),)))
    run = simulate(board.circuit({}, sources=source(wave)))
    assert run.of("u") == pytest.approx(2.0 * np.sin(40.0 * run.times), abs=2e-7)


def test_positive_feedback_ends_in_a_sentence_or_at_the_rail() -> None:
    circuit = oscillator()
    parts = tuple(
        replace(p, nets=(p.nets[1], p.nets[0], p.nets[2])) if p.kind == "op amp" and p.stage == "xi" else p
        for p in circuit.parts
    )
    run = simulate(replace(circuit, parts=parts))
    assert run.failure or np.abs(run.of("xi")).max() > 11.9


def test_a_large_board_runs_on_sparse_matrices_as_a_small_one_does() -> None:
    # A chain of decaying stages x1' = -x1, x2' = x1 - x2 ...: the first stage is exp(-t) at any length of the chain.
    def chain(length: int):
        board = Board(time_scale=1e-3, duration=3e-3)
        last = GROUND
        for i in range(length):
            board.integrator(f"x{i}", [(last, 100e3), (f"x{i}", 100e3)], 10e-9, start=5.0 if i == 0 else 0.0)
            last = f"x{i}"
        return board.circuit({})

    large, small = simulate(chain(80), **IDEAL), simulate(chain(3), **IDEAL)
    assert not large.failure
    for net in ("x0", "x1", "x2"):
        assert large.of(net) == pytest.approx(small.of(net), abs=1e-4)
    assert small.of("x0") == pytest.approx(5.0 * np.exp(-small.times / 1e-3), abs=1e-3)


def test_the_ideal_board_passes_a_switched_step_that_its_fastest_pole_dwarfs(tmp_path: Path) -> None:
    # The method's own first step after the switches turned was ten reductions too long for it.
    (tmp_path / "pulse.toml").write_text(
        """
title = "Pulse into cubic decays"
equations = [
  "x1' = -62.5*x1 - 36.1*x1^3 + 43.3*u",
  "x2' = -89.9*x2 - 49*x2^3",
  "x3' = -15.4*x3 - 38*x3^3",
  "out = 1.07*x1 + 0.305*x2 - 0.806*x3",
]
duration = 0.115
time_unit = "us"
watch = ["x3", "+out"]
start = { x1 = 0.447, x2 = 1.07, x3 = -0.564 }
inputs = { u = "1.55*pulse(t, 0.0371, 0.0669)" }
build = { op_amp = "LT1365", resistors = "E12", capacitors = "E3", run = "free", speed = 2.65e-07 }
""",
        encoding="utf-8",
    )
    plan = make_plan(read_problem(tmp_path / "pulse.toml"))
    circuit = plan.circuit
    assert circuit is not None
    run = simulate(circuit, **IDEAL)
    assert run.failure == ""
    assert run.times[-1] == circuit.duration
