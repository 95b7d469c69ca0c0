"""The bring-up sheet: hold time, control lines, what a voltmeter shows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from patchplan.check.model import Model
from patchplan.check.network import build_network
from patchplan.check.start import hold_state
from patchplan.circuit.records import Pin
from patchplan.report.sheet import allowances, control_table, hold_seconds, package_table, static_table, steps
from patchplan.report.tables import source_table
from patchplan.report.write import source_files


@pytest.mark.parametrize("name", ["lorenz", "motor_speed_loop", "oven", "tank_level"])
def test_hold_lasts_ten_time_constants_of_the_board_in_hold(plans, name):
    """The slowest pole of the nodal model in hold, found apart from the sheet."""
    plan = plans.of(name)
    model = Model(build_network(plan.circuit, "hold"))
    network = model.network
    state, push = np.zeros(model.size), model.push(np.append(np.zeros(len(network.sources)), 1.0))
    slope = model.jacobian(state, push, slewing=False)
    slope = slope if isinstance(slope, np.ndarray) else slope.toarray()
    slowest = -1.0 / np.linalg.eigvals(slope).real.max()
    # The multipliers and op amps are far faster; the switch adds its 20 ohm to thousands.
    assert hold_seconds(plan) == pytest.approx(max(10 * slowest, 1e-3), rel=0.02)


def test_a_free_board_has_no_hold_and_no_table_of_it(plans):
    plan = plans.of("integrator")
    assert hold_seconds(plan) is None
    assert not static_table(plan, hold_state(plan.circuit)).rows
    assert not control_table(plan).rows
    told = " ".join(steps(plan))
    assert "no hold" in told
    assert "needs no reference" in told
    assert "OPERATE" not in told


def test_control_lines_say_what_they_move_and_when(plans):
    plan = plans.of("two_mass_drive")
    table = {row[0]: row for row in control_table(plan).rows}
    assert set(table) == {"OPERATE", "M_ON", "BRAKE_ON"}
    moved = {ref for row in table.values() for ref in row[1].split()}
    assert moved == {p.ref for p in plan.circuit.parts if p.kind == "switch"}
    # M is a pulse from 0.05 s of 0.5 s, the brake a step at 0.75 s; both in circuit time.
    scale = 1e3 * plan.circuit.time_scale
    assert table["M_ON"][2] == f"from {0.05 * scale:.3g} ms to {0.55 * scale:.3g} ms"
    assert table["BRAKE_ON"][2] == f"from {0.75 * scale:.3g} ms on"


def test_a_step_of_the_board_is_no_source_from_outside(plans):
    plan = plans.of("motor_speed_loop")
    files = source_files(plan)
    assert set(files) == {"r"}
    (row,) = source_table(plan, {name: file for name, (file, _) in files.items()}).rows
    # 0.1 % of the 10 kohm that the inverter loads it with.
    assert row[3] == "10 Ω"


def test_packages_are_listed_pin_by_pin(plans):
    plan = plans.of("motor_speed_loop")
    rows = {row[0]: row for row in package_table(plan).rows}
    assert list(rows) == ["U1", "U2", "U3", "U4", "REF1"]
    assert rows["U1"][1] == "TL07x"
    pin = next(p for p in plan.circuit.wiring if p.package == "U1" and p.number == 1)
    assert pin == Pin("U1", 1, "w")
    assert rows["U1"][2].replace("\N{NO-BREAK SPACE}", " ").startswith("1 w, 2 w_inv, 3 ground, 4 vcc")


@pytest.mark.parametrize("name", ["oven", "lorenz", "motor_speed_loop", "tank_level"])
def test_boards_of_other_resistors_stay_inside_the_allowance(plans, name):
    """Start volts of boards whose resistors lie anywhere in their tolerance."""
    plan = plans.of(name)
    waveforms = plan.reach.reference.waveforms
    start = hold_state(plan.circuit, waveforms)
    allowed = allowances(plan, start)
    chance = np.random.default_rng(1)
    for _ in range(8):
        parts = tuple(
            replace(p, value=p.value * (1 + p.tolerance * chance.uniform(-1, 1)))
            if p.kind in ("resistor", "reference") else p
            for p in plan.circuit.parts
        )  # fmt: skip
        volts = hold_state(replace(plan.circuit, parts=parts), waveforms)
        for node in plan.circuit.nodes:
            assert abs(volts[node] - start[node]) <= allowed[node], node


@pytest.mark.parametrize("name", ["seat_suspension", "lorenz"])
def test_no_stage_is_called_like_a_part(plans, name):
    plan = plans.of(name)
    assert not {s.name for s in plan.patch.stages} & {p.ref for p in plan.circuit.parts}
    assert [p.ref for p in plan.circuit.parts if p.kind == "switch"][:2] == ["SW1", "SW2"]


def test_dials_are_set_first_and_measured_by_an_ohmmeter(plans):
    plan = plans.of("seat_suspension")
    (law,) = plan.circuit.knobs
    told = steps(plan)
    at = next(i for i, step in enumerate(told) if "turn each dial to its planned value" in step)
    assert at < next(i for i, step in enumerate(told) if step.startswith("Switch on"))
    track = next(p for p in plan.circuit.parts if p.ref == law.ref)
    ohm = float(told[at].partition("its travel, ")[2].split()[0]) * 1e3
    assert ohm == pytest.approx(law.setting * track.total, rel=0.01)
