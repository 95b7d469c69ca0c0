"""A board with a fault in it: the check and ngspice, a simulator from outside, must both see the same wrong board."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from patchplan.check.compare import check_circuit
from patchplan.check.records import Verdict
from patchplan.check.start import hold_state
from patchplan.circuit.build import replace_part
from patchplan.circuit.records import Circuit, Part
from patchplan.circuit.spice import largest_step, spice_text
from patchplan.report.board import board_rate
from patchplan.report.records import Plan
from tests.circuit.spice import run_ngspice
from tests.plans import Plans

Array = NDArray[np.float64]
Mutation = Callable[[Circuit], Circuit]

#: Two integrators, an inverter, two multipliers and a start value.
NAME = "detest_E2_van_der_pol_mu1"


@pytest.fixture(scope="module")
def plan(plans: Plans) -> Plan:
    return plans.of(NAME)


def legs_into(circuit: Circuit, bus: str) -> list[Part]:
    """The resistors of an integrator's inputs, the smallest first."""
    found = [p for p in circuit.parts if p.kind == "resistor" and p.nets[1] == bus]
    return sorted(found, key=lambda p: p.value)


def swap(circuit: Circuit, one: Part, other: Part) -> Circuit:
    assert one.value != other.value
    return replace_part(replace_part(circuit, one.ref, value=other.value), other.ref, value=one.value)


def resistors_swapped(circuit: Circuit) -> Circuit:
    legs = legs_into(circuit, "y_d_bus")
    return swap(circuit, legs[0], legs[-1])


def capacitor_mistaken(circuit: Circuit) -> Circuit:
    """The next value of E6 but one, as a hand in the wrong box takes it: two good ones may be alike."""
    one = next(p for p in circuit.parts if p.kind == "capacitor")
    return replace_part(circuit, one.ref, value=2.2 * one.value)


def start_resistors_swapped(circuit: Circuit) -> Circuit:
    one, other = (p for p in circuit.parts if p.kind == "resistor" and p.nets[1] == "y_ic")
    return swap(circuit, one, other)


def wire_cut(circuit: Circuit) -> Circuit:
    leg = legs_into(circuit, "y_d_bus")[-1]
    return replace_part(circuit, leg.ref, nets=("loose", leg.nets[1]))


def factor_flipped(circuit: Circuit) -> Circuit:
    part = [p for p in circuit.parts if p.kind == "multiplier"][-1]
    first, second, *others = part.nets
    return replace_part(circuit, part.ref, nets=(second, first, *others))


def op_amp_flipped(circuit: Circuit) -> Circuit:
    part = [p for p in circuit.parts if p.kind == "op amp"][-1]
    plus, minus, out = part.nets
    return replace_part(circuit, part.ref, nets=(minus, plus, out))


def unchanged(circuit: Circuit) -> Circuit:
    return circuit


def verdict_of(plan: Plan, circuit: Circuit) -> Verdict:
    return check_circuit(
        circuit, plan.reach.reference, plan.sensitivity, plan.patch, plan.sizing, plan.target,
        system=plan.form.system, budget=False,
    )  # fmt: skip


def spice_of(plan: Plan, circuit: Circuit) -> tuple[dict[str, Array], Array]:
    start = hold_state(circuit, plan.reach.reference.waveforms)
    step = largest_step(circuit.duration, board_rate(plan))
    return run_ngspice(spice_text(circuit, start, max_step=step), seconds=120.0)


@pytest.mark.parametrize(
    "mutation", [unchanged, resistors_swapped, capacitor_mistaken, start_resistors_swapped, wire_cut, factor_flipped]
)
def test_check_and_spice_see_the_same_board(plan: Plan, mutation: Mutation) -> None:
    """Equal within 0.5 % of peak at every node, and far from the good board wherever there is a fault."""
    assert plan.circuit is not None
    circuit = mutation(plan.circuit)
    verdict = verdict_of(plan, circuit)
    volts, seconds = spice_of(plan, circuit)
    apart = 0.0
    for net, own in verdict.volts.items():
        peak = float(np.abs(own).max())
        seen = np.interp(verdict.times, seconds, volts[net])
        # A node that a cut wire leaves within a millivolt of ground shows nothing but bias currents.
        assert np.abs(seen - own).max() <= max(0.005 * peak, 1e-3), net
        good = plan.verdict.volts[net][: len(own)]
        apart = max(apart, float(np.abs(seen - good).max() / np.abs(good).max()))
    if mutation is unchanged:
        assert verdict.verdict == "follows"
        assert apart < 0.005
    else:
        assert verdict.verdict != "follows"
        assert verdict.max_error_percent > 10.0
        assert apart > 0.1


def test_an_op_amp_with_its_inputs_swapped_stands_at_a_rail_in_both(plan: Plan) -> None:
    assert plan.circuit is not None
    good = plan.circuit
    circuit = op_amp_flipped(good)
    out = [p for p in circuit.parts if p.kind == "op amp"][-1].nets[2]
    verdict = verdict_of(plan, circuit)
    assert verdict.verdict == "overload"
    assert out in {n.node for n in verdict.nodes if not n.ok}
    volts, _ = spice_of(plan, circuit)
    # The model's swing is a soft edge: drive against the clamp lets the pole stand a little beyond it.
    assert np.abs(volts[out]).max() > 0.99 * good.op_amp.high
    assert np.abs(volts[out]).max() == pytest.approx(np.abs(verdict.volts[out]).max(), rel=0.02)
