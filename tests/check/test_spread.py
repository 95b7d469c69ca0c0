"""The spread between boards against boards whose parts are drawn at random."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

import patchplan
from patchplan.check.compare import check_circuit
from patchplan.check.figures import error_base, signal_of
from patchplan.check.simulate import simulate
from patchplan.check.spread import spread_of
from patchplan.circuit.records import Circuit, Part
from patchplan.patch.records import Patch, Stage, Wire
from patchplan.report.records import Plan
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Leg, NodeScale, Sizing, StageSizing, Target
from tests.check.boards import MULTIPLIER, OP_AMP

PROBLEM = """
title = "Damped swing with a push and a constant pull"
equations = ["x'' = -x - 0.6*x' + 0.5 + 0.3*x*x'"]
duration = 6.0
[start]
x = 1.0
"x'" = -0.5
"""
BOARDS = 80


@pytest.fixture(scope="module")
def plan(tmp_path_factory: pytest.TempPathFactory) -> Plan:
    file = Path(tmp_path_factory.mktemp("spread")) / "swing.toml"
    file.write_text(PROBLEM, encoding="utf-8")
    return patchplan.plan(patchplan.read_problem(file))


def drawn(circuit: Circuit, rng: np.random.Generator, *, offsets: bool) -> Circuit:
    """A board as it comes from the workshop: uniform tolerances, op amps with offset voltages."""
    parts: list[Part] = []
    for part in circuit.parts:
        if offsets and part.kind == "op amp":
            net = f"{part.ref} offset"
            parts.append(Part(f"{part.ref} Vos", "reference", (net,), circuit.op_amp.offset * rng.standard_normal()))
            parts.append(replace(part, nets=(net, *part.nets[1:])))
        elif not offsets and part.kind in ("resistor", "capacitor", "reference"):
            parts.append(replace(part, value=part.value * (1.0 + part.tolerance * rng.uniform(-1.0, 1.0))))
        else:
            parts.append(part)
    return replace(circuit, parts=tuple(parts))


def assert_spread_is_that_of_drawn_boards(plan: Plan, *, offsets: bool) -> None:
    """The predicted spread of every watched signal is that of boards drawn at random, each simulated."""
    circuit, reference = plan.circuit, plan.reach.reference
    assert circuit is not None
    times = np.linspace(0.0, circuit.duration, 61)
    rng = np.random.default_rng(1)
    runs = np.array([
        [signal_of(circuit, run, net) for net in circuit.watched.values()]
        for run in (simulate(drawn(circuit, rng, offsets=offsets), times=times, tolerance=1e-5) for _ in range(BOARDS))
    ])  # fmt: skip
    base = np.array([error_base(circuit, reference, name) for name in circuit.watched])
    found = runs.std(axis=0) / base[:, None]
    parts = spread_of(plan.sensitivity, plan.patch, plan.sizing, plan.target)
    names = ("offsets",) if offsets else ("resistors", "capacitors", "reference")
    predicted = np.sqrt(sum(parts[name] ** 2 for name in names))
    rows = [plan.sensitivity.watched.index(name) for name in circuit.watched]
    # A standard deviation of 80 boards is itself good to 1/sqrt(2*80), 8 %; three of those, and the second order.
    assert predicted[rows].max(axis=1) == pytest.approx(found.max(axis=1), rel=0.27)


@pytest.mark.parametrize("offsets", [False, True], ids=["tolerances", "offsets"])
def test_spread_is_that_of_boards_drawn_at_random(plan: Plan, offsets: bool) -> None:
    assert_spread_is_that_of_drawn_boards(plan, offsets=offsets)


def test_a_spread_above_what_is_accepted_is_a_warning_with_its_remedy(plan: Plan) -> None:
    args = (plan.circuit, plan.reach.reference, plan.sensitivity, plan.patch, plan.sizing, plan.target)
    strict = check_circuit(*args, system=plan.form.system, accept=0.1, budget=False)
    assert strict.spread_percent > 0.1
    assert any("one standard deviation" in w and "would lower it" in w for w in strict.warnings)
    lax = check_circuit(*args, system=plan.form.system, accept=100.0, budget=False)
    assert not any("one standard deviation" in w for w in lax.warnings)


def test_half_the_tolerance_halves_the_part_of_its_cause(plan: Plan) -> None:
    before = spread_of(plan.sensitivity, plan.patch, plan.sizing, plan.target)
    finer = replace(plan.target, capacitor_tolerance=plan.target.capacitor_tolerance / 2)
    after = spread_of(plan.sensitivity, plan.patch, plan.sizing, finer)
    assert after["capacitors"] == pytest.approx(before["capacitors"] / 2)
    assert after["resistors"] == pytest.approx(before["resistors"])


def test_a_dc_limit_resistor_stops_the_drift() -> None:
    # Conant, Analog Dialogue; cases/formulas.json integrator_drift: settles to (1 + Rf/R)*Vos.
    ohm, leak, farad = 10e3, 100e3, 100e-9
    time_scale, times = 1e-3, np.linspace(0.0, 100.0, 201)
    stage = Stage("y", "integrator", "y", "y", 1, (Wire("u", Fraction(-1)),))
    one = np.ones((1, 1, len(times)))
    sensitivity = Sensitivity(("y",), np.ones(1), times, (("y", 0),), 0 * one, ("y",), times * one, 0 * one, {})
    sized = StageSizing("y", (Leg((ohm,)),), farad, leak)
    sizing = Sizing(time_scale, (0.0, 1.0), ("", ""), {"y": NodeScale("y", 2.0, 1.0, 12.0)}, {"y": sized}, ())
    target = Target((), (), 0.01, 0.02, 10.0, 0.001, OP_AMP, MULTIPLIER, 0.0, 0.0)
    offsets = spread_of(sensitivity, Patch((stage,), {"y": "y"}, {}, {}), sizing, target)["offsets"]
    settled = (1 + leak / ohm) * OP_AMP.offset / 2.0
    assert offsets[0] == pytest.approx(settled * (1 - np.exp(-times * time_scale / (leak * farad))), rel=1e-9)
