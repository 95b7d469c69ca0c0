"""circuit.cir in ngspice, a general-purpose simulator from outside, against the Reference and the tool's own check."""

from __future__ import annotations

import functools
from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from patchplan.check.figures import error_base, settled
from patchplan.report.board import board_of
from tests.circuit.spice import run_ngspice
from tests.plans import Plans

Array = NDArray[np.float64]
Spice = Callable[[str], tuple[dict[str, Array], Array]]

#: What each plan is here for.
PLANS = {
    "oscillator": "a lossless loop, which shows damping that comes from the method",
    "lorenz_1963_short": "two multipliers, exponential sensitivity",
    "detest_E2_van_der_pol_mu1": "a limit cycle",
    "hoist_swing": "time-varying coefficients from an outside source",
    "airy_oscillatory": "time-varying, a ramp as factor",
    "stiff_detest_C2_nonlinear_coupling": "stiff, 100:1",
    "stiff_detest_E2_van_der_pol_mu5": "stiff and nonlinear",
    "seat_suspension": "a recorded input, a knob",
    "oven": "an offset, a square wave",
    "thermal_rc_chain_10": "ten states",
    "motor_speed_loop": "real time, terminals",
    "tank_real_time": "two hours of circuit time, networks of three resistors",
    "integrator": "free-running, DC-limit resistor",
    "torque_filter": "a block in other states than the file's, real time",
    "single_ended": "multipliers without differential inputs",
    "factored": "a watched sum as factor of two products, one of them its square",
    "two_mass_drive": "steps and pulses from the reference, an algebraic signal",
}


@pytest.fixture(scope="module")
def spice(plans: Plans) -> Spice:
    """Waveforms of a plan's netlist, each run once."""

    @functools.cache
    def run(name: str) -> tuple[dict[str, Array], Array]:
        return run_ngspice(board_of(plans.of(name))[1], seconds=200.0)

    return run


def error_against(times: Array, wanted: Array, spice_times: Array, found: Array, counts: NDArray[np.bool_]) -> float:
    """Largest difference on the simulator's own time points, so that no interpolation of its waveform is needed.

    The wanted curve is read by linear interpolation of rows that are fine enough for it (1e-4 of the peak).
    """
    inside = np.interp(spice_times, times, counts.astype(float)) == 1.0
    assert inside.mean() > 0.5
    return float(np.abs(found - np.interp(spice_times, times, wanted))[inside].max())


@pytest.mark.parametrize("name", PLANS)
def test_spice_follows_the_reference(plans: Plans, spice: Spice, name: str) -> None:
    """Within the error that the check predicted plus 0.5 % of peak, at every watched signal."""
    plan = plans.of(name)
    volts, seconds = spice(name)
    assert plan.circuit is not None
    assert seconds[-1] == pytest.approx(plan.circuit.duration, rel=1e-6)
    reference, circuit = plan.reach.reference, plan.circuit
    stated = {s.name: s.max_error_percent for s in plan.verdict.signals}
    wait = 1e-3 * plan.circuit.duration / plan.circuit.time_scale
    for signal, net in circuit.watched.items():
        node, base = circuit.nodes[net], error_base(circuit, reference, signal)
        found = (volts[net] - node.offset_volts) / (node.sign * node.volts_per_unit)
        counts = settled(reference, signal, base, wait)
        counts &= reference.times <= (np.inf if plan.verdict.horizon is None else plan.verdict.horizon)
        error = error_against(reference.times, reference.of(signal), seconds / circuit.time_scale, found, counts)
        assert 100 * error / base <= stated[signal] + 0.5, signal


@pytest.mark.parametrize("name", PLANS)
def test_spice_equals_the_check(plans: Plans, spice: Spice, name: str) -> None:
    """Within 0.5 % of the peak of the tool's own simulation, at every node that carries a signal."""
    plan = plans.of(name)
    volts, seconds = spice(name)
    assert plan.circuit is not None
    verdict, reference = plan.verdict, plan.reach.reference
    horizon = np.inf if verdict.horizon is None else verdict.horizon
    wait = 1e-3 * plan.circuit.duration / plan.circuit.time_scale
    for net, own in verdict.volts.items():
        node = plan.circuit.nodes[net]
        known = node.signal in reference.names
        counts = (
            settled(reference, node.signal, float(np.ptp(own)), wait) if known else jumps_settled(own, verdict.times)
        )
        counts &= verdict.times / plan.circuit.time_scale <= horizon
        error = error_against(verdict.times, own, seconds, volts[net], counts)
        assert 100 * error <= 0.5 * np.abs(own).max(), net


def jumps_settled(volts: Array, times: Array) -> NDArray[np.bool_]:
    """Rows that are no jump of a node, nor shortly after one."""
    counts = np.ones(len(times), bool)
    # A constant moves by rounding alone.
    least = max(0.02 * np.ptp(volts), 1e-6 * np.abs(volts).max())
    for row in np.flatnonzero(np.abs(np.diff(volts)) > least) + 1:
        counts[row - 1 : np.searchsorted(times, times[row] + 1e-3 * times[-1], side="right")] = False
    return counts
