"""Supply current, held against a sum by hand."""

from __future__ import annotations

import pytest

from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.current import supply_current
from patchplan.circuit.records import Circuit, Part
from patchplan.circuit.target import target_of
from patchplan.equation.problem import Build


def test_packages_at_rest_and_mean_currents_into_loads_add_up():
    catalogue = load_catalogue()
    target = target_of(Build(), catalogue)
    parts = (
        Part("U1A", "op amp", ("0", "a_inv", "a"), package="U1", section="A", model="TL07x"),
        Part("U1B", "op amp", ("0", "b_inv", "b"), package="U1", section="B", model="TL07x"),
        Part("U2", "multiplier", ("a", "0", "b", "0", "0", "p"), package="U2", model="AD633"),
        Part("REF1", "reference", ("ref",), 10.0, model="REF102"),
        Part("R1", "resistor", ("ref", "a_inv"), 10e3),
        Part("R2", "resistor", ("a", "b_inv"), 5e3),
        Part("R3", "resistor", ("p", "b_inv"), 20e3),
    )
    circuit = Circuit(parts, {}, {}, target.op_amp, target.multiplier, (-15.0, 15.0), 1.0, 1.0, "free")
    rest = 4 * 1.4e-3 + 4e-3 + 1.4e-3
    loads = 10.0 / 10e3 + 3.0 / 5e3 + 2.0 / 20e3
    assert supply_current(circuit, catalogue, {"a": 3.0, "b": 7.0, "p": 2.0}) == pytest.approx(rest + loads)


def test_a_part_that_does_not_say_what_it_draws_counts_its_loads_alone():
    figures = {key: figure.value for key, figure in load_catalogue().op_amps["TL07x"].figures.items()}
    del figures["supply_current"]
    catalogue = load_catalogue({"mine": {"kind": "op amp", **figures}})
    target = target_of(Build(op_amp="mine"), catalogue)
    parts = (
        Part("U1", "op amp", ("0", "a_inv", "a"), package="U1", model="mine"),
        Part("R1", "resistor", ("a", "a_inv"), 1e3),
    )
    circuit = Circuit(parts, {}, {}, target.op_amp, target.multiplier, (-15.0, 15.0), 1.0, 1.0, "free")
    assert supply_current(circuit, catalogue, {"a": 2.0}) == pytest.approx(2e-3)
