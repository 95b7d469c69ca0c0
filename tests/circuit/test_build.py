"""Parts and nets of each kind of stage."""

from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction

import pytest

from patchplan.circuit.build import build_circuit, output_loads, replace_part
from patchplan.circuit.records import Circuit, Part
from patchplan.circuit.target import target_of
from patchplan.equation.problem import Build
from patchplan.equation.system import Source
from patchplan.errors import CannotBuild
from patchplan.patch.records import Patch, Stage
from patchplan.sizing.records import Leg
from tests.circuit.boards import (
    CATALOGUE,
    REFERENCE,
    board_of,
    exact_sizing,
    form_of,
    oscillator,
    oscillator_patch,
    van_der_pol,
    van_der_pol_patch,
    wire,
)  # fmt: skip

OSCILLATOR = """\
REF1 reference v_ref 10 REF102
R1 resistor v_ref v_ref_n_inv 10000
U1A op amp 0 v_ref_n_inv v_ref_n 0 TL07x
R2 resistor v_ref_n_inv v_ref_n 10000
R3 resistor x_d_n x_bus 99980
SW1 switch x_bus x_inv 20 DG413 operate
U1B op amp 0 x_inv x 0 TL07x
C1 capacitor x_inv x 1e-08 C0G or film
SW2 switch x_inv x_ic 20 DG413 hold
R4 resistor v_ref_n x_ic 12500
R5 resistor x x_ic 10000
R6 resistor x x_d_bus 99980
SW3 switch x_d_bus x_d_inv 20 DG413 operate
U1C op amp 0 x_d_inv x_d 0 TL07x
C2 capacitor x_d_inv x_d 1e-08 C0G or film
SW4 switch x_d_inv x_d_ic 20 DG413 hold
R7 resistor x_d x_d_ic 10000
R8 resistor x_d x_d_n_inv 10000
U1D op amp 0 x_d_n_inv x_d_n 0 TL07x
R9 resistor x_d_n_inv x_d_n 10000
C3 decoupling vcc 0 1e-07 ceramic
C4 decoupling vee 0 1e-07 ceramic
C5 decoupling vcc 0 1e-07 ceramic
C6 decoupling vee 0 1e-07 ceramic
C7 decoupling vcc 0 1e-07 ceramic
C8 decoupling vcc 0 1e-05 electrolytic
C9 decoupling vee 0 1e-05 electrolytic"""


def on_net(circuit: Circuit, net: str) -> Iterator[Part]:
    return (p for p in circuit.parts if net in p.nets)


def test_the_whole_oscillator():
    assert str(oscillator()) == OSCILLATOR


def test_designators_are_unique():
    refs = [p.ref for p in van_der_pol().parts]
    assert len(refs) == len(set(refs))


def test_in_hold_only_the_start_network_is_on_the_summing_node():
    circuit = oscillator()
    kinds = sorted((p.kind, p.closed) for p in on_net(circuit, "x_inv"))
    assert kinds == [("capacitor", ""), ("op amp", ""), ("switch", "hold"), ("switch", "operate")]


def test_operate_and_hold_switches_take_the_contacts_meant_for_them():
    data = CATALOGUE.switches["DG413"]
    for part in oscillator().parts:
        if part.kind == "switch":
            assert part.section in (data.operate if part.closed == "operate" else data.hold)


def test_a_free_run_has_no_switches_and_says_where_it_starts():
    circuit = oscillator(build=Build(run="free"))
    assert not [p for p in circuit.parts if p.kind == "switch"]
    assert {p.nets[1] for p in on_net(circuit, "x_d_n") if p.kind == "resistor" and p.stage == "int_x"} == {"x_inv"}
    assert circuit.start == {"x": 8.0, "x_d": 0.0}


@pytest.mark.parametrize("sign", [1, -1])
def test_start_resistor_goes_to_the_opposite_reference(sign):
    stages = tuple(replace(s, start=Fraction(sign)) if s.name == "int_x" else s for s in oscillator_patch().stages)
    circuit = board_of(
        replace(oscillator_patch(), stages=stages), {"x": 8.0, "x_d": 8.0, "x_d_n": 8.0}, time_scale=1e-3, duration=1.0
    )
    (other,) = [p.nets[0] for p in on_net(circuit, "x_ic") if p.kind == "resistor" and "x" not in p.nets]
    assert other == ("v_ref_n" if sign > 0 else "v_ref")


def test_a_product_of_the_other_sign_swaps_the_first_input():
    plain = next(p for p in van_der_pol().parts if p.nets[-1] == "xxv")
    assert plain.nets == ("xx", "0", "x_d", "0", "0", "xxv")
    stages = tuple(replace(s, sign=-1) if s.name == "mul_xxv" else s for s in van_der_pol_patch().stages)
    volts = {"x": 4.0, "x_d": 2.5, "x_d_n": 2.5, "xx": 1.6, "xxv": 0.4}
    circuit = board_of(replace(van_der_pol_patch(), stages=stages), volts, time_scale=1e-3, duration=1.0)
    assert next(p for p in circuit.parts if p.nets[-1] == "xxv").nets == ("0", "xx", "x_d", "0", "0", "xxv")


def test_a_t_leg_is_three_resistors():
    patch, target = oscillator_patch(), target_of(Build(), CATALOGUE)
    sizing = exact_sizing(patch, target, {"x": 8.0, "x_d": 8.0, "x_d_n": 8.0}, 1e-3)
    stages = dict(sizing.stages)
    stages["int_x_d"] = replace(stages["int_x_d"], legs=(Leg((10e3, 1e3, 20e3)),))
    circuit = build_circuit(form_of(duration=1), patch, replace(sizing, stages=stages), target, Build(), CATALOGUE)
    legs = [(p.nets, p.value) for p in on_net(circuit, "x_d_t1")]
    assert legs == [(("x", "x_d_t1"), 10e3), (("x_d_t1", "0"), 1e3), (("x_d_t1", "x_d_bus"), 20e3)]


def test_unused_sections_are_tied():
    notes = van_der_pol().notes
    assert not [n for n in notes if "Not used" in n]
    stages = (*oscillator_patch().stages, Stage("inv_x", "inverter", "x_n", "x", -1, (wire("x"),)))
    circuit = board_of(
        replace(oscillator_patch(), stages=stages),
        {"x": 8, "x_d": 8, "x_d_n": 8, "x_n": 8},
        time_scale=1e-3,
        duration=1.0,
    )
    assert [n for n in circuit.notes if "Not used" in n] == [
        "Not used: sections B, C and D of U2. Tie minus to out and plus to ground."
    ]


def test_every_package_is_decoupled_on_both_rails():
    circuit = van_der_pol()
    packages = {p.package for p in circuit.parts if p.package and p.kind != "decoupling"}
    rails = {(package, rail) for package in packages for rail in ("vcc", "vee")}
    # The reference uses the high rail alone; two larger capacitors stand where the supply comes in.
    rails |= {("REF1", "vcc"), ("", "vcc"), ("", "vee")}
    assert {(p.package, p.nets[0]) for p in circuit.parts if p.kind == "decoupling"} == rails


def test_an_overloaded_output_is_noted():
    patch, target = oscillator_patch(), target_of(Build(), CATALOGUE)
    sizing = exact_sizing(patch, target, {"x": 8.0, "x_d": 8.0, "x_d_n": 8.0}, 1e-3)
    stages = dict(sizing.stages)
    stages["inv_x_d"] = replace(stages["inv_x_d"], feedback=1e3)
    circuit = build_circuit(form_of(duration=1), patch, replace(sizing, stages=stages), target, Build(), CATALOGUE)
    (note,) = [n for n in circuit.notes if "rated" in n]
    # 1 kohm beside the leg of 99.98 kohm.
    assert note.startswith("Node x_d_n drives 990 ohm; TL07x is rated for 2e+03 ohm")
    assert output_loads(circuit.parts)["x_d_n"] == pytest.approx(1 / (1 / 1e3 + 1 / 99.98e3))


def test_load_counts_what_the_switches_let_through():
    parts = oscillator().parts
    # In operate the leg of the next integrator, in hold the start network of its own stage.
    assert output_loads(parts)["x"] == pytest.approx(10e3)
    legs_alone = tuple(p for p in parts if p.ref != "R5")
    assert output_loads(legs_alone)["x"] == pytest.approx(99.98e3)
    fixed, pot = (
        Part("R1", "resistor", ("o", "o_w"), 2e3),
        Part("RV1", "potentiometer", ("o_w", "i", "i"), 0.3, total=1e4),
    )
    assert output_loads((fixed, pot))["o"] == pytest.approx(5e3)


def test_offsets_become_volts_and_sources_keep_their_units():
    source = Stage("src", "source", "u", "u", -1)
    patch = Patch((REFERENCE, source), {"u": "u"}, {"u": Source("u", None)}, {})
    target = target_of(Build(), CATALOGUE)
    sizing = exact_sizing(patch, target, {"u": 4.0}, 1e-3)
    times, values = (0.0, 1.0), (2.0, 3.0)
    circuit = build_circuit(
        form_of(duration=1, offsets={"u": Fraction(5, 2)}), patch, sizing, target, Build(), CATALOGUE,
        stand_ins={"u": (times, values)},
    )  # fmt: skip
    # v = -4 V * (u - 2.5)
    assert circuit.nodes["u"].offset_volts == 10.0
    assert next(p for p in circuit.parts if p.kind == "source").value == -4.0
    assert circuit.sources["u"].waveform.recording.values == values
    assert not circuit.notes


def test_multipliers_on_a_low_supply_cannot_be_built():
    build = Build(supply=(-2.5, 2.5), op_amp="OPA4340", reference=2.0)
    with pytest.raises(CannotBuild, match="AD633 takes 16 V"):
        board_of(van_der_pol_patch(), {}, time_scale=1e-3, duration=1.0, build=build)


def test_one_part_is_replaced():
    circuit = replace_part(oscillator(), "R3", value=1.0)
    assert [(a.ref, b.value) for a, b in zip(oscillator().parts, circuit.parts, strict=True) if a != b] == [("R3", 1.0)]
    with pytest.raises(KeyError):
        replace_part(circuit, "R99", value=1.0)
