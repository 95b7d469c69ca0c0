"""Every problem of equations/ goes the whole way and gives a board worth building."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import impulse
from scipy.special import ellipj

from patchplan.equation.reader import read_problem
from patchplan.equation.system import Row
from patchplan.errors import PatchplanError
from patchplan.patch.read_back import read_back
from patchplan.pipeline import plan as make_plan
from patchplan.report.records import Plan
from tests.plans import EQUATIONS, Plans

NAMES = sorted(path.stem for path in EQUATIONS.glob("*.toml"))
#: Lorenz is run far beyond what can be followed; no other problem has exponential sensitivity.
CHAOTIC = ("lorenz",)
#: Scales are found in logs; their last digits are not to decide.
ROUNDED = 1e-9


def test_there_are_enough_problems() -> None:
    """Own rigs and published systems; a problem that reads as a plan of nothing would not be here."""
    assert len(NAMES) >= 13


@pytest.mark.parametrize("name", NAMES)
def test_follows(plans: Plans, name: str) -> None:
    """The nominal board stays within 5 % and inside all limits; only chaos has a horizon."""
    plan = plans.of(name)
    verdict = plan.verdict
    assert verdict.verdict == "follows", (verdict.max_error_percent, [n for n in verdict.nodes if not n.ok])
    assert verdict.max_error_percent < 5
    assert all(node.ok for node in verdict.nodes)
    assert (verdict.horizon is not None) == (name in CHAOTIC)
    assert {s.name for s in verdict.signals} == {signal for signal, _ in plan.system.watch}


@pytest.mark.parametrize("name", NAMES)
def test_patch_reads_back_as_the_form(plans: Plans, name: str) -> None:
    """Wires and signs alone give the equations again, exactly."""
    plan = plans.of(name)
    system = plan.form.system
    wanted: dict[str, Row] = {row.name: row for row in (*system.rows, *system.signals)}
    found = read_back(plan.patch, {row.name for row in system.signals})
    assert {n: str(found[n]) for n in wanted} == {n: str(row) for n, row in wanted.items()}


def free_nodes(plan: Plan) -> dict[str, str]:
    """Nodes whose scale the planner may choose, with their kind.

    Not free: the reference; products (their volts follow from both factors and the multiplier's scale); what a terminal
    dictates; steps and pulses, which the board switches from its own reference; inverters, which repeat the volts of
    their source.
    """
    switched = {name for name, source in plan.patch.sources.items() if not source.external}
    kinds = {s.node: s.kind for s in plan.patch.stages}
    fixed = {s.node for s in plan.patch.stages if s.signal in plan.form.scales or s.signal in switched}
    return {n: k for n, k in kinds.items() if k not in ("reference", "multiplier", "inverter") and n not in fixed}


@pytest.mark.parametrize("name", NAMES)
def test_nodes_use_their_swing(plans: Plans, name: str) -> None:
    """Scaling puts every free node's largest swing between 50 and 95 % of its limit."""
    plan = plans.of(name)
    scales = plan.sizing.scales
    use = {node: scales[node].peak_volts / scales[node].limit_volts for node in free_nodes(plan)}
    assert {node: share for node, share in use.items() if not 0.5 - ROUNDED <= share <= 0.95 + ROUNDED} == {}
    assert {n: s for n, s in scales.items() if s.peak_volts > s.limit_volts * (1 + ROUNDED)} == {}


@pytest.mark.parametrize("name", NAMES)
def test_coefficients_are_realised(plans: Plans, name: str) -> None:
    """No coefficient is lost or off by more than the class of its resistor after all rounding."""
    plan = plans.of(name)
    assert plan.sizing.coefficients
    # 5 %: half the widest gap of E24 (IEC 60063); what a single nearest value would leave.
    assert max(abs(c.error_percent) for c in plan.sizing.coefficients) < 5


@pytest.mark.parametrize("name", NAMES)
def test_speed_is_inside_its_window(plans: Plans, name: str) -> None:
    """The window's ends say what sets them.

    A speed that the file asks for may be slower than single resistors allow: then T-networks stand in for them.
    """
    plan = plans.of(name)
    sizing = plan.sizing
    low, high = sizing.window
    assert all(sizing.limits)
    assert low <= sizing.time_scale
    if sizing.time_scale > high:
        assert plan.problem.build.speed != "free"
        assert any(len(leg.resistors) == 3 for stage in sizing.stages.values() for leg in stage.legs)


@pytest.mark.parametrize("name", ["motor_speed_loop", "pickup_filter"])
def test_real_time_is_real_time(plans: Plans, name: str) -> None:
    """One second of the rig is one second of the board, and terminals keep the volts they ask for."""
    plan = plans.of(name)
    assert plan.circuit is not None
    assert plan.sizing.time_scale == 1.0
    for signal, terminal in plan.problem.terminals.items():
        node = plan.circuit.nodes[plan.circuit.watched.get(signal, signal)]
        assert node.signal in (signal, f"{signal}.out")
        assert node.sign * node.volts_per_unit == pytest.approx(float(terminal.volts_per_unit), rel=1e-6)


def test_integrator_has_a_dc_limit(plans: Plans) -> None:
    """A free-running integrator needs a resistor across its capacitor; an oscillator is ruined by one."""
    plan = plans.of("integrator")
    assert plan.patch.counts()["integrator"] == 1
    (integrator,) = [s for s in plan.patch.stages if s.kind == "integrator"]
    assert plan.sizing.stages[integrator.name].feedback > 0
    ring = plans.of("oscillator")
    assert all(ring.sizing.stages[s.name].feedback == 0 for s in ring.patch.stages if s.kind == "integrator")


def test_oscillator_is_two_integrators_and_an_inverter(plans: Plans) -> None:
    """The textbook ring; one sign stage is proved necessary."""
    plan = plans.of("oscillator")
    counts = plan.patch.counts()
    assert (counts["integrator"], counts.get("inverter", 0) + counts.get("summer", 0)) == (2, 1)
    assert plan.patch.sign_stages == plan.patch.sign_stages_lower_bound == 1


def test_oven_carries_an_offset(plans: Plans) -> None:
    """A ripple of a few degrees around 80: carried as it stands it would use 3 % of the swing."""
    plan = plans.of("oven")
    assert plan.circuit is not None
    assert float(plan.form.offsets["T"]) == pytest.approx(80, abs=5)
    node = plan.circuit.nodes[plan.circuit.watched["T"]]
    assert abs(node.volts_per_unit) > 1.0


def test_lorenz_has_a_late_horizon(plans: Plans) -> None:
    """Lorenz 1963, section 7: from (0, 1, 0) regular up to about t = 16; the start's own swing is no horizon."""
    horizon = plans.of("lorenz").verdict.horizon
    assert horizon is not None
    assert 5 < horizon < 30


def test_damper_is_one_knob(plans: Plans) -> None:
    """The adjustable damper enters twice in the equation and is one knob on the board."""
    plan = plans.of("seat_suspension")
    assert plan.circuit is not None
    assert [s.knob for s in plan.patch.stages if s.knob] == ["c"]
    assert sum(part.kind == "potentiometer" for part in plan.circuit.parts) == 1


def test_unknown_input_is_scaled_by_proof(plans: Plans) -> None:
    """Bounded input, linear: peak gain by an independent sum of |h| (definition: DESIGN, ranges; scipy.signal)."""
    plan = plans.of("isolation_table")
    known = plan.reach.ranges["x"]
    times: NDArray[np.float64] = np.linspace(0, 3, 20001)
    _, response = impulse(([1.0], [1.0, 1963 / 250, 61.7e3 / 250]), T=times)
    peak = 0.3 * np.trapezoid(np.abs(response), times)
    assert known.known_by == "proved"
    assert known.high == pytest.approx(peak, rel=1e-3)
    assert known.low == pytest.approx(-peak, rel=1e-3)


def test_rigid_body_is_elliptic(plans: Plans) -> None:
    """Closed form: w1 = sn, w2 = cn, w3 = dn of parameter 0.51 (scipy.special.ellipj)."""
    plan = plans.of("rigid_body")
    reference = plan.reach.reference
    for name, closed in zip(("w1", "w2", "w3"), ellipj(reference.times, 0.51)[:3], strict=True):
        assert reference.of(name) == pytest.approx(closed, abs=1e-6)


@pytest.mark.parametrize("name", ["oscillator", "two_mass_drive", "rigid_body"])
def test_second_plan_is_the_same(plans: Plans, name: str) -> None:
    """Same input, same board: part by part."""
    again = make_plan(read_problem(EQUATIONS / f"{name}.toml"))
    first = plans.of(name)
    assert str(again.circuit) == str(first.circuit)
    assert again.verdict.max_error_percent == first.verdict.max_error_percent


def test_a_road_that_is_too_short_is_refused(tmp_path: Path) -> None:
    """The recording has to cover the run."""
    text = (EQUATIONS / "seat_suspension.toml").read_text(encoding="utf-8").replace("duration = 6.0", "duration = 60.0")
    (tmp_path / "seat.toml").write_text(text, encoding="utf-8")
    (tmp_path / "road.csv").write_text((EQUATIONS / "road.csv").read_text(encoding="utf-8"), encoding="utf-8")
    with pytest.raises(PatchplanError, match=r"road\.csv"):
        make_plan(read_problem(tmp_path / "seat.toml"))
