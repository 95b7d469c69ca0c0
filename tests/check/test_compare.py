"""The verdict on hand-built boards: what is changed on the board changes the verdict."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from patchplan.check import simulate as simulate_module
from patchplan.check.compare import check_circuit
from patchplan.check.records import Verdict
from patchplan.circuit.records import Circuit, Part
from patchplan.equation.system import System
from patchplan.patch.records import Patch
from patchplan.reach.records import Reference
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, Target
from tests.check.boards import MULTIPLIER, OP_AMP, Board, oscillator, van_der_pol

SYSTEM = System((), (), (), (), (), (), (), Fraction(1), "s", Fraction(1))
TARGET = Target((), (), 0.01, 0.02, 10.0, 0.001, OP_AMP, MULTIPLIER, 100.0, 0.0)


def cosine(cycles: float) -> Reference:
    times = np.linspace(0.0, 2 * math.pi * cycles, 2001)
    wave = np.array([np.cos(times), -np.sin(times)])
    return Reference(("x", "v"), times, wave, np.array([-np.sin(times), -np.cos(times)]))


def limit_cycle(duration: float) -> Reference:
    times = np.linspace(0.0, duration, 2001)
    run = solve_ivp(lambda t, y: [y[1], (1 - y[0] ** 2) * y[1] - y[0]], (0, duration), [2, 0], "DOP853", rtol=1e-11,
                    atol=1e-11, t_eval=times)  # fmt: skip
    x, v = run.y
    return Reference(("x", "v"), times, run.y, np.array([v, (1 - x**2) * v - x]))


def verdict_on(circuit: Circuit, reference: Reference, *, budget: bool = False) -> Verdict:
    times = reference.times[::50]
    none = np.zeros((2, 0, len(times)))
    sensitivity = Sensitivity(("x", "v"), np.ones(2), times, (), none, (), none, none, {})
    patch, sizing = Patch((), circuit.watched, {}, {}), Sizing(circuit.time_scale, (0.0, 1.0), ("", ""), {}, {}, ())
    return check_circuit(circuit, reference, sensitivity, patch, sizing, TARGET, system=SYSTEM, budget=budget)


def changed(circuit: Circuit, ref: str, **changes: object) -> Circuit:
    return replace(circuit, parts=tuple(replace(p, **changes) if p.ref == ref else p for p in circuit.parts))


def legs(circuit: Circuit, stage: str) -> list[Part]:
    return [p for p in circuit.parts if p.kind == "resistor" and p.stage == stage]


def test_a_sound_board_follows_and_says_where_its_error_comes_from() -> None:
    found = verdict_on(oscillator(cycles=2.0), cosine(2.0), budget=True)
    assert found.verdict == "follows"
    # First order, cases/formulas.json harmonic_oscillator_growth: 2*pi*2*e a cycle, e = w0/wt = 1e4/(2 pi 3e6).
    assert found.max_error_percent == pytest.approx(100 * 4 * math.pi * 2 * 1e4 / (2 * math.pi * 3e6), rel=0.1)
    budget = {c.cause: c.error_percent for c in found.budget}
    assert found.budget[0].cause == "bandwidth"
    assert budget["bandwidth"] == pytest.approx(found.max_error_percent, rel=0.02)
    assert budget["rounding"] < 0.01
    assert 0.01 < budget["switch resistance, if 10 % off"] < 2.0
    assert "multiplier bandwidth" not in budget


def test_frequency_error_of_a_slow_oscillator_is_told_apart() -> None:
    board = oscillator(cycles=10.0, op_amp=replace(OP_AMP, gain_bandwidth=1e10, slew=1e9))
    slow = changed(board, next(p.ref for p in board.parts if p.kind == "capacitor"), value=10e-9 * 1.004)
    found = {s.name: s for s in verdict_on(slow, cosine(10.0)).signals}
    assert found["x"].frequency_error_percent == pytest.approx(-0.2, abs=0.01)
    assert found["x"].max_error_percent > 10.0
    assert found["x"].stretched_error_percent < 0.5


def test_swapping_two_unequal_resistors_changes_the_verdict() -> None:
    board = van_der_pol()
    reference = limit_cycle(20.0)
    assert verdict_on(board, reference).verdict == "follows"
    one, two = legs(board, "v")[:2]
    assert one.value != two.value
    swapped = changed(changed(board, one.ref, value=two.value), two.ref, value=one.value)
    assert verdict_on(swapped, reference).verdict != "follows"


@pytest.mark.parametrize("pin", [0, 1])
def test_cutting_a_wire_changes_the_verdict(pin: int) -> None:
    board = van_der_pol()
    leg = legs(board, "x")[0]
    cut = changed(board, leg.ref, nets=tuple("cut" if i == pin else n for i, n in enumerate(leg.nets)))
    assert verdict_on(cut, limit_cycle(20.0)).verdict != "follows"


def test_flipping_an_input_changes_the_verdict() -> None:
    board = van_der_pol()
    part = next(p for p in board.parts if p.kind == "multiplier")
    flipped = changed(board, part.ref, nets=(part.nets[1], part.nets[0], *part.nets[2:]))
    found = verdict_on(flipped, limit_cycle(20.0))
    assert found.verdict == "overload"
    assert any(n.cause for n in found.nodes)


def test_a_clipped_board_is_an_overload_with_node_and_time() -> None:
    board = Board(time_scale=1e-4, duration=2 * math.pi * 1e-4)
    board.integrator("x", [("v", 20e3)], 10e-9, start=-8.0, stage="x")
    board.integrator("v", [("xi", 5e3)], 10e-9, stage="v")
    board.summer("xi", [("x", 10e3)], 10e3, stage="xi")
    board.node("x", "x", -1, 8.0)
    board.node("v", "v", 1, 16.0)
    board.node("xi", "x", 1, 8.0)
    found = verdict_on(board.circuit({"x": "x", "v": "v"}), cosine(1.0))
    assert found.verdict == "overload"
    peak = next(n for n in found.nodes if n.node == "v")
    assert not peak.ok
    assert peak.cause in found.warnings
    # The sine of 16 V passes 12 V after asin(12/16).
    assert peak.time >= math.asin(0.75) * 1e-4


def test_a_run_that_is_given_up_is_a_result_with_a_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(simulate_module, "_MOST_EVALUATIONS", 200)
    found = verdict_on(van_der_pol(), limit_cycle(20.0), budget=True)
    assert found.verdict == "overload"
    assert any("given up at" in w for w in found.warnings)
    assert math.isfinite(found.max_error_percent)
    assert found.budget == ()


def test_clipping_is_the_cause_where_a_node_clips() -> None:
    """The values are exact, so that none of the error is rounding, however much the outputs clip."""
    board = oscillator(cycles=2.0)
    top = max(abs(n.peak_volts) for n in verdict_on(board, cosine(2.0)).nodes)
    low = replace(board, op_amp=replace(board.op_amp, low=-0.6 * top, high=0.6 * top),
                  nodes={k: replace(n, limit_volts=0.6 * top) for k, n in board.nodes.items()})  # fmt: skip
    found = verdict_on(low, cosine(2.0), budget=True)
    assert found.verdict == "overload"
    first = found.budget[0]
    assert first.cause.startswith("clipping (overload of ")
    assert first.error_percent == pytest.approx(found.max_error_percent, rel=0.1)
    sound = {c.cause: c.error_percent for c in verdict_on(board, cosine(2.0), budget=True).budget}
    for cause in found.budget[1:]:
        assert cause.error_percent == pytest.approx(sound[cause.cause], abs=0.01)
