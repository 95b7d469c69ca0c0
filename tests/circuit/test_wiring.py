"""Pin by pin: every package is complete, and its pins carry what the parts list says."""

from __future__ import annotations

from collections import Counter

import pytest

from patchplan.circuit.records import Circuit
from patchplan.equation.problem import Build
from tests.circuit.boards import CATALOGUE, board_of, oscillator, oscillator_patch, van_der_pol
from tests.circuit.test_switched import step_board

BOARDS = {"oscillator": oscillator(), "van_der_pol": van_der_pol(), "step": step_board("5*step(t - 0.3)")}
PARTS = {**CATALOGUE.op_amps, **CATALOGUE.multipliers, **CATALOGUE.switches, **CATALOGUE.references}


def nets_of(circuit: Circuit, package: str) -> dict[int, str]:
    return {pin.number: pin.net for pin in circuit.wiring if pin.package == package}


@pytest.fixture(params=BOARDS)
def board(request) -> Circuit:
    return BOARDS[request.param]


def test_every_pin_of_the_catalogue_goes_somewhere_once(board):
    models = {p.package or p.ref: p.model for p in board.parts if p.model in PARTS}
    for package, model in models.items():
        numbers = Counter(pin.number for pin in board.wiring if pin.package == package)
        assert set(numbers.values()) == {1}
        assert set(numbers) == {n for group in PARTS[model].pins.values() for n in group}


def test_pins_carry_the_nets_of_their_parts(board):
    seen = 0
    for part in board.parts:
        if part.model in PARTS:
            nets = nets_of(board, part.package or part.ref)
            assert len(part.pins) == len(part.nets)
            assert tuple(nets[pin] for pin in part.pins) == part.nets
            seen += 1
    assert seen


def test_a_quad_op_amp_by_hand():
    """Pin numbers of the usual quad: 1 out A, 2 minus A, 3 plus A, 4 high rail, 11 low rail (common practice)."""
    nets = nets_of(oscillator(), "U1")
    assert [nets[i] for i in (1, 2, 3, 4, 11)] == ["v_ref_n", "v_ref_n_inv", "0", "vcc", "vee"]


def test_control_inputs_follow_the_switch_they_move():
    board = step_board("5*step(t - 0.3)")
    nets = nets_of(board, "U2")
    control = dict(zip("ABCD", CATALOGUE.switches["DG413"].pins["control"], strict=True))
    for part in board.parts:
        if part.kind == "switch":
            assert nets[control[part.section]] == ("U_ON" if part.control else "OPERATE")


def test_sections_left_over_are_made_safe():
    board = step_board("5*step(t - 0.3)", run="free")
    op_amp, switch = nets_of(board, "U1"), nets_of(board, "U2")
    # Section D of the quad: plus 12, minus 13, out 14.
    assert (op_amp[12], op_amp[13]) == ("0", op_amp[14])
    used = {p.section for p in board.parts if p.kind == "switch"}
    data = CATALOGUE.switches["DG413"].pins
    for section, control in zip("ABCD", data["control"], strict=True):
        if section not in used:
            assert {switch[pin] for pin in (*data[section], control)} == {"0"}
    assert any(n.startswith("Not used: switch ") for n in board.notes)


def test_a_reference_that_the_catalogue_lacks_is_noted():
    volts = {"x": 8.0, "x_d": 8.0, "x_d_n": 8.0}
    for build, words in (
        (Build(reference=3.3), "No reference of the catalogue gives 3.3 V"),
        (Build(reference_tolerance=1e-4), "REF102 is good for 0.1 %, REF1 is to hold 0.01 %"),
    ):
        circuit = board_of(oscillator_patch(), volts, time_scale=1e-3, duration=1.0, build=build)
        assert sum(words in note for note in circuit.notes) == 1
