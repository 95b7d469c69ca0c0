"""Whole boards in an outside simulator against the solutions of their equations."""

import re
from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from patchplan.circuit.records import Circuit
from patchplan.circuit.spice import largest_step, lasting_rate, spice_text
from patchplan.equation.problem import Build
from tests.circuit.boards import oscillator, resting, van_der_pol
from tests.circuit.spice import run_ngspice

STARTS = {"x": 8.0, "v_ref_n": -10.0, "xx": 6.4}


def netlist(circuit: Circuit, *, part: float = 1.0, fastest: float = 3.0) -> str:
    step = part * largest_step(circuit.duration, fastest / circuit.time_scale)
    return spice_text(circuit, resting(circuit, STARTS), max_step=step, title="x'' = -x")


def near_ideal(circuit: Circuit) -> Circuit:
    op_amp = replace(circuit.op_amp, gain=1e9, gain_bandwidth=1e3 * circuit.op_amp.gain_bandwidth)
    return replace(circuit, op_amp=op_amp, multiplier=replace(circuit.multiplier, bandwidth=1e10))


@pytest.mark.parametrize("run", ["once", "free"])
def test_oscillator_with_near_ideal_parts_is_a_cosine(run):
    circuit = near_ideal(oscillator(build=Build(run=run)))
    nodes, time = run_ngspice(netlist(circuit, fastest=1.0))
    assert time[-1] == pytest.approx(circuit.duration)
    # The step rule allows 1e-3 rad over the run.
    assert np.abs(nodes["x"] - 8 * np.cos(time / circuit.time_scale)).max() < 1e-3 * 8


def test_oscillator_grows_by_finite_bandwidth():
    # Formula harmonic_oscillator_growth of the reference cases: 1.262647 % a cycle at w0/w_t = 1e-3, A0 without limit.
    circuit = oscillator(cycles=10, build=Build(run="free"))
    fast = replace(circuit.op_amp, gain=1e12, gain_bandwidth=1e3 / circuit.time_scale)
    nodes, time = run_ngspice(netlist(replace(circuit, op_amp=fast), part=0.25, fastest=1.0))
    radius = np.hypot(nodes["x"], nodes["x_d"])
    cycles = time / circuit.time_scale / (2 * np.pi)
    growth = np.polyfit(cycles[len(time) // 10 :], np.log(radius[len(time) // 10 :]), 1)[0]
    # Resistors are exact for ideal op amps, so the frequency is 0.1 % low and growth a cycle differs by 1e-5 only.
    assert np.expm1(growth) * 100 == pytest.approx(1.262647, rel=0.01)


def test_van_der_pol_follows_scipy():
    circuit = near_ideal(van_der_pol())
    nodes, time = run_ngspice(netlist(circuit))

    def field(_t, y):
        return [y[1], (1 - y[0] ** 2) * y[1] - y[0]]

    end = circuit.duration / circuit.time_scale
    solved = solve_ivp(field, (0, end), [2.0, 0.0], rtol=1e-10, atol=1e-12, dense_output=True)
    x, v = solved.sol(np.minimum(time / circuit.time_scale, end))
    # 1e-3 rad of phase over the run by the step rule, nothing else is left.
    assert np.abs(nodes["x"] / 4.0 - x).max() < 1e-3 * np.abs(x).max()
    assert np.abs(nodes["x_d"] / 2.5 - v).max() < 1e-3 * np.abs(v).max()
    assert np.abs(nodes["xxv"] / 0.4 - x**2 * v).max() < 2e-3 * np.abs(x**2 * v).max()


def test_halving_the_step_changes_little():
    circuit = van_der_pol()
    runs = [run_ngspice(netlist(circuit, part=part)) for part in (1.0, 0.5)]
    grid = np.linspace(0, circuit.duration, 500)
    coarse, fine = (np.interp(grid, time, nodes["x"]) for nodes, time in runs)
    assert np.abs(coarse - fine).max() < 1e-3 * np.abs(fine).max()


def test_every_output_starts_exactly():
    circuit = van_der_pol()
    nodes, time = run_ngspice(netlist(circuit))
    assert time[0] == 0.0
    for part in circuit.parts:
        if part.kind in ("op amp", "multiplier"):
            assert nodes[part.nets[-1]][0] == pytest.approx(STARTS.get(part.nets[-1], 0.0), abs=1e-6)


def test_the_netlist_has_one_title_one_run_and_no_control_block():
    lines = netlist(van_der_pol()).splitlines()
    assert lines[0] == "* x'' = -x"
    assert sum(line.startswith(".tran ") for line in lines) == 1
    assert lines[-1] == ".end"
    assert not any(line.startswith(".control") for line in lines)
    assert "* v(x_d_n) = -2.5 V * (x'), inverter" in lines


def test_a_title_stays_on_its_line():
    text = spice_text(oscillator(), resting(oscillator(), STARTS), max_step=1e-5, title="a\r\n.control\nshell\x85b")
    assert text.splitlines()[0] == "* a .control shell b"


def test_the_netlist_has_nine_digits_and_is_the_same_each_time():
    text = netlist(van_der_pol())
    assert text == netlist(van_der_pol())
    digits = [len(n.replace(".", "").lstrip("0")) for n in re.findall(r"(?<![\w.])\d+\.?\d*", text)]
    assert max(digits) <= 9


def test_lasting_rate_of_a_sine_and_of_a_transient():
    times = np.linspace(0.0, 20 * np.pi, 20001)
    both = np.abs([np.sin(3 * times), np.cos(3 * times)]) * 3
    # Mean of max(|sin|, |cos|)^3 over a quarter: (4/pi) * integral of cos^3 from 0 to pi/4 = 5*sqrt(2)/(3*pi).
    assert lasting_rate(times, both) == pytest.approx(3 * (5 * np.sqrt(2) / (3 * np.pi)) ** (1 / 3), rel=1e-4)
    fast = 1000 * np.exp(-1000 * times[None, :] / 10)
    assert lasting_rate(times, fast) < 0.2 * 1000
