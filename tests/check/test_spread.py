"""The spread between boards against boards whose parts are drawn at random."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import patchplan
from patchplan.check.compare import check_circuit
from patchplan.check.figures import error_base, signal_of
from patchplan.check.simulate import simulate
from patchplan.check.spread import spread_of
from patchplan.circuit.records import Circuit, Part
from patchplan.report.records import Plan

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


@pytest.mark.parametrize("offsets", [False, True], ids=["tolerances", "offsets"])
def test_spread_is_that_of_boards_drawn_at_random(plan: Plan, offsets: bool) -> None:
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
