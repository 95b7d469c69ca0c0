"""Knobs, with an outside simulator as the judge of what a setting gives."""

from dataclasses import replace
from fractions import Fraction

import pytest

from patchplan.circuit.build import build_circuit
from patchplan.circuit.knobs import TRACKS, rheostat
from patchplan.circuit.records import Circuit
from patchplan.circuit.spice import spice_text
from patchplan.circuit.target import target_of
from patchplan.equation.problem import Build
from patchplan.equation.system import Knob
from patchplan.equation.tree import Name
from patchplan.errors import CannotBuild
from patchplan.patch.records import Patch, Stage
from patchplan.sizing.records import Leg, NodeScale, Sizing, StageSizing
from tests.circuit.boards import CATALOGUE, NEGATIVE, REFERENCE, form_of, resting, wire
from tests.circuit.spice import run_ngspice

RESISTORS = target_of(Build(), CATALOGUE).resistors


def knob_board(low: float, high: float, value: float, *, bipolar: bool, feedback: float, leg: float) -> Circuit:
    """A summer that takes the reference times a knob: v_out = -knob * 1 V."""
    knob = Knob("c", Name("c"), ("c",), *(Fraction(v) for v in (value, low, high)))
    wires = (wire("v_ref"), wire("v_ref_n")) if bipolar else (wire("v_ref"),)
    summer = Stage("sum_c", "summer", "c_out", "c", -1, wires, knob="c", bipolar=bipolar)
    patch = Patch((REFERENCE, NEGATIVE, summer), {}, {}, {"c": knob})
    target, build = target_of(Build(), CATALOGUE), Build()
    scales = {n: NodeScale(n, v, 10.0, 12.0) for n, v in {"v_ref": 10.0, "v_ref_n": 10.0, "c_out": 1.0}.items()}
    stages = {
        "reference_n": StageSizing("reference_n", (Leg((10e3,)),), feedback=10e3),
        "sum_c": StageSizing("sum_c", (Leg((leg,)),), feedback=feedback),
    }
    sizing = Sizing(1.0, (0.0, 1.0), ("", ""), scales, stages, ())
    return build_circuit(form_of(duration=1e-3), patch, sizing, target, build, CATALOGUE)


def output(circuit: Circuit, setting: float | None = None) -> float:
    """Output after a millisecond, with the potentiometer where it is or at a setting."""
    if setting is not None:
        parts = tuple(replace(p, value=setting) if p.kind == "potentiometer" else p for p in circuit.parts)
        circuit = replace(circuit, parts=parts)
    nodes, _ = run_ngspice(spice_text(circuit, resting(circuit, {"v_ref_n": -10.0}), max_step=1e-5))
    return float(nodes["c_out"][-1])


def ends(circuit: Circuit) -> list[float]:
    """Settings at the ends of the dial, as the note tells them."""
    (note,) = [n for n in circuit.notes if n.startswith("RV1")]
    words = note.split()
    return [float(words[i - 1]) / 100 for i, word in enumerate(words) if word == "%"][:2]


def test_a_rheostat_gives_the_nominal_value_and_covers_the_range():
    circuit = knob_board(1.0, 6.0, 3.5, bipolar=False, feedback=35e3, leg=100e3)
    assert output(circuit) == pytest.approx(-3.5, rel=1e-4)
    low, high = ends(circuit)
    # The dial is told to 0.1 % of a track of 100 kohm.
    assert output(circuit, low) == pytest.approx(-1.0, abs=0.01)
    assert output(circuit, high) == pytest.approx(-6.0, abs=0.01)


def test_a_rheostat_from_zero_is_the_potentiometer_alone():
    circuit = knob_board(0.0, 5.0, 2.0, bipolar=False, feedback=20e3, leg=100e3)
    assert [p.kind for p in circuit.parts if p.stage == "sum_c"] == ["resistor", "op amp", "potentiometer"]
    assert output(circuit) == pytest.approx(-2.0, rel=1e-4)
    assert output(circuit, 0.0) == pytest.approx(0.0, abs=1e-3)


@pytest.mark.parametrize("value", [-4.0, 0.0, 1.0, 5.0])
def test_a_knob_through_zero_allows_for_its_loaded_wiper(value):
    circuit = knob_board(-5.0, 5.0, value, bipolar=True, feedback=21e3, leg=40e3)
    assert output(circuit) == pytest.approx(-value, abs=5e-4)


def test_a_dial_stays_on_its_track():
    for low, high in [(0.1, 0.1), (0.01, 7.0), (0.9, 1.1)]:
        dial = rheostat(50e3, 0.1 if low == 0.1 else 1.0, (low, high), RESISTORS)
        assert 0 <= dial.low <= dial.setting <= dial.high <= 1
        assert dial.track in TRACKS
        assert dial.fixed == 0 or dial.fixed in RESISTORS


def test_a_range_that_no_track_covers_is_refused():
    with pytest.raises(CannotBuild, match="the longest track is 2e"):
        rheostat(1e6, 1.0, (0.1, 10.0), RESISTORS)


def test_a_knob_out_of_reach_is_refused():
    with pytest.raises(CannotBuild, match="its potentiometer reaches"):
        knob_board(-5.0, 5.0, 5.0, bipolar=True, feedback=10e3, leg=40e3)
