"""Knobs, with an outside simulator as the judge of what a setting gives."""

from dataclasses import replace
from fractions import Fraction

import numpy as np
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


def test_a_rheostat_gives_the_nominal_value_and_covers_the_range():
    circuit = knob_board(1.0, 6.0, 3.5, bipolar=False, feedback=35e3, leg=100e3)
    assert output(circuit) == pytest.approx(-3.5, rel=1e-4)
    (law,) = circuit.knobs
    for setting, knob, parameter in law.points[::5]:
        assert output(circuit, setting) == pytest.approx(-knob, rel=1e-4)
        assert parameter == knob
    assert law.covers_least[0] <= 1.0
    assert law.covers_least[1] >= 6.0


def test_a_rheostat_from_zero_needs_no_resistor_in_series():
    circuit = knob_board(0.0, 5.0, 2.0, bipolar=False, feedback=20e3, leg=100e3)
    (track,) = (p for p in circuit.parts if p.kind == "potentiometer")
    assert track.nets[0] == "c_out"
    assert output(circuit) == pytest.approx(-2.0, rel=1e-4)
    assert output(circuit, 0.0) == pytest.approx(0.0, abs=1e-3)


@pytest.mark.parametrize(("low", "high"), [(1.0, 6.0), (0.0, 5.0), (0.2, 0.9), (2.0, 2.5), (10.0, 300.0)])
def test_the_travel_of_a_rheostat_is_little_longer_than_the_range(low, high):
    """The range is covered at both ends of all tolerances, and a nominal board travels less than half as far again."""
    dial = rheostat(20e3 / high, high, (low, high), RESISTORS)
    ohms = 20e3 / high * np.array([low, high])
    for track in (0.8, 1.0, 1.2):
        for off in (0.99, 1.01):
            used = np.array([0.0, dial.track * track])
            across = used * dial.parallel * off / (used + dial.parallel * off) if dial.parallel else used
            lowest, highest = dial.fixed * off + across
            assert lowest <= ohms[0] * (1 + 1e-9)
            assert highest >= ohms[1] * (1 - 1e-9)
    travel = np.diff(dial.ohms(np.array([0.0, 1.0])))[0]
    assert travel < 1.5 * (ohms[1] - dial.fixed)


@pytest.mark.parametrize(("low", "high"), [(-5.0, 5.0), (-1.0, 5.0), (-4.0, 0.5)])
@pytest.mark.parametrize("setting", [0.0, 0.3, 1.0])
def test_a_travel_through_zero_has_the_law_that_the_plan_states(low, high, setting):
    """Nodes of the two halves of the track and the leg solved with numpy; the op amp's summing node at ground."""
    circuit = knob_board(low, high, high, bipolar=True, feedback=21e3, leg=40e3)
    (law,) = circuit.knobs
    by_stage = [p for p in circuit.parts if p.stage == "sum_c"]
    (pot,) = (p for p in by_stage if p.kind == "potentiometer")
    resistors = [(p.nets, p.value) for p in by_stage if p.kind == "resistor"]
    resistors += [((pot.nets[0], pot.nets[1]), max(setting * pot.total, 1e-6))]
    resistors += [((pot.nets[1], pot.nets[2]), max((1 - setting) * pot.total, 1e-6))]
    fixed = {"v_ref": 10.0, "v_ref_n": -10.0, "c_out_inv": 0.0}
    free = sorted({n for nets, _ in resistors for n in nets} - set(fixed) - {"c_out"})
    matrix, right = np.zeros((len(free), len(free))), np.zeros(len(free))
    for nets, ohm in resistors:
        for here, there in (nets, nets[::-1]):
            if here in free:
                matrix[free.index(here), free.index(here)] += 1 / ohm
                if there in free:
                    matrix[free.index(here), free.index(there)] -= 1 / ohm
                else:
                    right[free.index(here)] += fixed[there] / ohm
    wiper = np.linalg.solve(matrix, right)[free.index("c_out_w")]
    leg = next(ohm for nets, ohm in resistors if nets == ("c_out_w", "c_out_inv"))
    feedback = next(ohm for nets, ohm in resistors if "c_out" in nets)
    told = np.interp(setting, [p[0] for p in law.points], [p[1] for p in law.points])
    assert -wiper / leg * feedback == pytest.approx(-told, abs=1e-3)
    assert min(law.covers_least) <= low
    assert max(law.covers_least) >= high
    assert abs(law.covers[1] - law.covers[0]) < 1.5 * (high - low)


@pytest.mark.parametrize("value", [-4.0, 0.0, 1.0, 5.0])
def test_a_knob_through_zero_allows_for_its_loaded_wiper(value):
    circuit = knob_board(-5.0, 5.0, value, bipolar=True, feedback=21e3, leg=40e3)
    assert output(circuit) == pytest.approx(-value, abs=5e-4)


def test_a_dial_stays_on_its_track():
    for low, high in [(0.1, 0.1), (0.01, 7.0), (0.9, 1.1)]:
        dial = rheostat(50e3, 0.1 if low == 0.1 else 1.0, (low, high), RESISTORS)
        assert -1e-9 <= dial.low <= dial.setting <= dial.high <= 1
        assert dial.track in TRACKS
        assert dial.fixed == 0 or dial.fixed in RESISTORS


def test_a_range_that_no_track_covers_is_refused():
    with pytest.raises(CannotBuild, match="the longest track is 2e"):
        rheostat(1e6, 1.0, (0.1, 10.0), RESISTORS)


def test_a_knob_out_of_reach_is_refused():
    with pytest.raises(CannotBuild, match="its potentiometer reaches"):
        knob_board(-5.0, 5.0, 5.0, bipolar=True, feedback=10e3, leg=40e3)
