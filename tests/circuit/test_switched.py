"""Steps and pulses made from the reference: real parts, and the same in the check and in ngspice."""

from __future__ import annotations

import numpy as np
import pytest

from patchplan.check.simulate import simulate
from patchplan.check.start import hold_state
from patchplan.circuit.build import build_circuit, output_loads, replace_part
from patchplan.circuit.records import Circuit
from patchplan.circuit.spice import spice_text
from patchplan.circuit.switched import with_references
from patchplan.circuit.target import target_of
from patchplan.equation.problem import Build
from patchplan.equation.syntax import parse_expression
from patchplan.equation.system import Source, level_of
from patchplan.equation.waveform import Waveform
from patchplan.patch.records import Patch, Stage
from tests.circuit.boards import CATALOGUE, exact_sizing, form_of, wire
from tests.circuit.spice import run_ngspice

#: y' = a*step(t - 0.3) - y from rest; time constant 1 unit, 1 ms a unit.
DURATION, JUMP, SCALE = 2.0, 0.3, 1e-3


def step_patch(text: str, sign: int) -> Patch:
    source = Stage("src", "source", "u", "u", sign)
    lag = Stage("int", "integrator", "y", "y", 1, (wire("u", -sign), wire("y", -1)))
    return Patch((source, lag), {"y": "y"}, {"u": Source("u", Waveform(parse_expression(text)), external=False)}, {})


def step_board(text: str, *, sign: int = 1, volts: float = 2.0, run: str = "once") -> Circuit:
    build = Build(run=run)
    target = target_of(build, CATALOGUE)
    patch = step_patch(text, sign)
    sizing = exact_sizing(patch, target, {"u": volts, "y": 2.0}, SCALE)
    patch, sizing = with_references(patch, sizing, target, DURATION)
    return build_circuit(form_of(duration=int(DURATION)), patch, sizing, target, build, CATALOGUE)


def switches(circuit: Circuit) -> dict[str, tuple[str, ...]]:
    return {p.closed: p.nets for p in circuit.parts if p.control}


def test_level_is_the_value_while_on():
    def source(text: str, *, external: bool = False) -> Source:
        return Source("u", Waveform(parse_expression(text)), external=external)

    assert level_of(source("-785*step(t - 0.5)"), 6.0) == -785.0
    assert level_of(source("6*pulse(t, 0.05, 0.5)"), 1.0) == 6.0
    assert level_of(source("3*step(2 - t)"), 6.0) == 3.0
    assert level_of(source("3*step(t - 7)"), 6.0) == 0.0
    assert level_of(source("3*step(t)", external=True), 6.0) == 0.0


def test_a_step_is_two_switches_a_reference_and_no_source():
    circuit = step_board("5*step(t - 0.3)")
    assert switches(circuit) == {"high": ("ref", "u"), "low": ("u", "0")}
    assert [p.value for p in circuit.parts if p.kind == "reference"] == [10.0]
    assert not [p for p in circuit.parts if p.kind == "source"]
    data = CATALOGUE.switches["DG413"]
    for part in circuit.parts:
        if part.control:
            assert part.section in (data.operate if part.closed == "high" else data.hold)
    assert "joins it to ref while its control line is high" in circuit.notes[0]


@pytest.mark.parametrize(("text", "sign"), [("-5*step(t - 0.3)", 1), ("5*step(t - 0.3)", -1)])
def test_a_step_below_zero_takes_an_inverter_on_the_reference(text, sign):
    circuit = step_board(text, sign=sign)
    assert switches(circuit)["high"] == ("ref_n", "u")
    assert [p.nets for p in circuit.parts if p.kind == "op amp" and p.nets[2] == "ref_n"] == [
        ("0", "ref_n_inv", "ref_n")
    ]
    assert circuit.nodes["ref_n"].sign == -1
    assert simulate(circuit).of("ref_n")[0] == pytest.approx(-10.0, rel=1e-4)


def test_references_that_are_there_already_are_used():
    patch = step_patch("-5*step(t - 0.3)", 1)
    target = target_of(Build(), CATALOGUE)
    sizing = exact_sizing(patch, target, {"u": 2.0, "y": 2.0}, SCALE)
    once = with_references(patch, sizing, target, DURATION)
    assert with_references(*once, target, DURATION) == once
    assert len(once[0].stages) == len(patch.stages) + 2
    assert once[0].sign_stages == patch.sign_stages + 1


def test_other_volts_than_the_reference_come_from_outside():
    circuit = step_board("5*step(t - 0.3)", volts=1.0)
    assert [p.nets for p in circuit.parts if p.kind == "source"] == [("u",)]
    assert not switches(circuit)


def test_a_free_run_has_switches_for_its_steps_alone():
    circuit = step_board("5*step(t - 0.3)", run="free")
    assert {p.closed for p in circuit.parts if p.kind == "switch"} == {"high", "low"}


@pytest.mark.parametrize("text", ["5*step(t - 0.3)", "-5*step(t - 0.3)", "5*pulse(t, 0.3, 0.9)"])
def test_check_and_spice_follow_the_step_through_the_switch(text):
    """Against the exponential of the loaded source: the switch stands in series with the leg."""
    circuit = step_board(text)
    ohm = next(p.value for p in circuit.parts if p.control)
    leg, lag = (p.value for p in circuit.parts if p.kind == "resistor" and p.nets[1] == "y_bus")
    run = simulate(circuit, times=np.linspace(0.0, circuit.duration, 2001))
    nodes, seconds = run_ngspice(spice_text(circuit, hold_state(circuit), max_step=circuit.duration / 4000))
    units = run.times / SCALE
    on = (units > JUMP + 1e-3) & (units < 1.2 - 1e-3)
    level = -10.0 if text.startswith("-") else 10.0
    assert run.of("u")[on] == pytest.approx(level * leg / (leg + ohm), rel=1e-4)
    gain = level * lag / (leg + ohm)
    assert run.of("y")[on] == pytest.approx(-gain * -np.expm1(-(units[on] - JUMP)), abs=1e-3 * abs(level))
    for net in ("u", "y"):
        seen = np.interp(run.times, seconds, nodes[net])
        away = (np.abs(units - JUMP) > 2e-3) & (np.abs(units - 1.2) > 2e-3)
        assert np.abs(seen - run.of(net))[away].max() < 1e-3 * 10.0, net


def test_the_reference_is_loaded_through_the_switch():
    circuit = step_board("5*step(t - 0.3)")
    leg = next(p.value for p in circuit.parts if p.kind == "resistor" and p.nets == ("u", "y_bus"))
    assert output_loads(circuit.parts)["ref"] == pytest.approx(leg)


def test_a_wire_from_the_reference_that_is_cut_is_missed():
    """The source is made of the parts alone: without its reference nothing comes."""
    circuit = step_board("5*step(t - 0.3)")
    switch = next(p for p in circuit.parts if p.closed == "high")
    cut = replace_part(circuit, switch.ref, nets=("loose", "u"))
    assert np.abs(simulate(cut).of("y")).max() < 1e-2
    assert np.abs(simulate(circuit).of("y")).max() > 5.0
    nodes, _ = run_ngspice(spice_text(cut, hold_state(cut), max_step=circuit.duration / 1000))
    assert np.abs(nodes["y"]).max() < 1e-2
