"""Boards of exact values at any speed, built and simulated in full: what a predicted curve is held against."""

from __future__ import annotations

from dataclasses import replace

from patchplan.check.compare import check_circuit
from patchplan.check.records import Verdict
from patchplan.circuit.build import build_circuit
from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.switched import with_references
from patchplan.report.records import Plan
from patchplan.sizing.drift import limited_stages
from patchplan.sizing.exact import exact_sizing
from patchplan.sizing.records import Sizing


def exact_board(plan: Plan, time_scale: float) -> Sizing:
    """The plan's board with its scale factors and exact values at another speed."""
    limited = limited_stages(plan.form, plan.patch, plan.ranges) if plan.problem.build.run == "free" else ()
    return exact_sizing(
        plan.patch, plan.sizing.scales, plan.target, time_scale, limited=limited, sensitivity=plan.sensitivity
    )


def checked(plan: Plan, sizing: Sizing) -> Verdict:
    """Full simulation of a board, from its parts and nets."""
    duration, build = float(plan.form.system.duration), plan.problem.build
    patch, sizing = with_references(plan.patch, sizing, plan.target, duration)
    catalogue = load_catalogue(plan.problem.own_parts)
    reference = plan.reach.reference
    circuit = build_circuit(plan.form, patch, sizing, plan.target, build, catalogue, stand_ins=reference.waveforms)
    return check_circuit(
        circuit, reference, plan.sensitivity, patch, replace(sizing, time_scale=circuit.time_scale), plan.target,
        system=plan.form.system, budget=False,
    )  # fmt: skip
