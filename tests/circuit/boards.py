"""Patches sized by hand with exact resistors, so that only the parts' own limits are left as errors."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction

from patchplan.circuit.build import build_circuit
from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.records import Circuit
from patchplan.circuit.target import target_of
from patchplan.equation.problem import Build
from patchplan.equation.system import State, System
from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage, Wire
from patchplan.sizing.records import Leg, NodeScale, Sizing, StageSizing, Target

CATALOGUE = load_catalogue()
FARAD = 10e-9
OHM = 10e3

REFERENCE = Stage("reference", "reference", "v_ref", "1", 1)
NEGATIVE = Stage("reference_n", "inverter", "v_ref_n", "1", -1, (Wire("v_ref", Fraction(1)),))


def wire(source: str, coefficient: float = 1) -> Wire:
    return Wire(source, Fraction(coefficient))


def form_of(*, duration: float, offsets: Mapping[str, Fraction] | None = None, states: tuple[State, ...] = ()) -> Form:
    system = System(states, (), (), (), (), (), (), Fraction(duration), "s", Fraction(1))
    return Form(system, offsets or {})


def exact_sizing(patch: Patch, target: Target, volts: Mapping[str, float], time_scale: float) -> Sizing:
    """Resistors that give every gain exactly, the operate switch counted in."""
    scales = {s.node: NodeScale(s.node, volts.get(s.node, target.reference), 10.0, 12.0) for s in patch.stages}
    unit = {node: scale.volts_per_unit for node, scale in scales.items()}
    stages = {}
    for stage in patch.stages:
        knob = abs(float(patch.knobs[stage.knob].value)) if stage.knob else 1.0
        gains = [abs(float(w.coefficient)) * knob * unit[stage.node] / unit[w.source] for w in stage.wires]
        if stage.kind == "integrator":
            wanted = [g / time_scale * FARAD for g in gains]
            summed = sum(wanted) / (1 - target.switch_on * sum(wanted))
            legs = tuple(Leg((1 / (w * (1 + target.switch_on * summed)),)) for w in wanted)
            start = stage.sign * float(stage.start) * unit[stage.node]
            network = (OHM * target.reference / abs(start) if start else 0.0, OHM)
            stages[stage.name] = StageSizing(stage.name, legs, FARAD, 0.0, network if target.switch_on else None, start)
        elif stage.kind in ("summer", "inverter"):
            stages[stage.name] = StageSizing(stage.name, tuple(Leg((OHM / g,)) for g in gains), feedback=OHM)
    return Sizing(time_scale, (0.0, 1.0), ("", ""), scales, stages, ())


def board_of(
    patch: Patch, volts: Mapping[str, float], *, time_scale: float, duration: float, build: Build | None = None
) -> Circuit:
    build = build or Build()
    target = target_of(build, CATALOGUE)
    sizing = exact_sizing(patch, target, volts, time_scale)
    return build_circuit(form_of(duration=duration), patch, sizing, target, build, CATALOGUE)


def oscillator_patch() -> Patch:
    """x'' = -x from x = 1: nodes carry x, x' and -x."""
    stages = (
        REFERENCE,
        NEGATIVE,
        Stage("int_x", "integrator", "x", "x", 1, (wire("x_d_n"),), Fraction(1)),
        Stage("int_x_d", "integrator", "x_d", "x'", 1, (wire("x", -1),)),
        Stage("inv_x_d", "inverter", "x_d_n", "x'", -1, (wire("x_d"),)),
    )
    return Patch(stages, {"x": "x"}, {}, {})


def van_der_pol_patch(mu: int = 1) -> Patch:
    """x'' = mu*(1 - x^2)*x' - x from x = 2, x' = 0: multipliers give x^2 and -x^2*x'."""
    stages = (
        REFERENCE,
        NEGATIVE,
        Stage("int_x", "integrator", "x", "x", 1, (wire("x_d_n"),), Fraction(2)),
        Stage("int_x_d", "integrator", "x_d", "x'", 1, (wire("x", -1), wire("x_d_n", mu), wire("xxv", -mu))),
        Stage("inv_x_d", "inverter", "x_d_n", "x'", -1, (wire("x_d"),)),
        Stage("mul_xx", "multiplier", "xx", "x*x", 1, (wire("x"), wire("x"))),
        Stage("mul_xxv", "multiplier", "xxv", "x*x*x'", 1, (wire("xx"), wire("x_d"))),
    )
    return Patch(stages, {"x": "x", "x'": "x_d"}, {}, {})


def oscillator(*, cycles: float = 3, time_scale: float = 1e-3, build: Build | None = None) -> Circuit:
    from math import pi

    duration = Fraction(2 * pi * cycles)
    volts = {"x": 8.0, "x_d": 8.0, "x_d_n": 8.0}
    return board_of(oscillator_patch(), volts, time_scale=time_scale, duration=float(duration), build=build)


def van_der_pol(*, duration: float = 20, time_scale: float = 1e-3) -> Circuit:
    volts = {"x": 4.0, "x_d": 2.5, "x_d_n": 2.5, "xx": 1.6, "xxv": 0.4}
    return board_of(van_der_pol_patch(), volts, time_scale=time_scale, duration=duration)


def resting(circuit: Circuit, outputs: Mapping[str, float]) -> dict[str, float]:
    """Start volts: the outputs given, 0 elsewhere."""
    nets = dict.fromkeys((n for p in circuit.parts for n in p.nets), 0.0)
    return nets | dict(outputs)


def without(circuit: Circuit, *kinds: str) -> Circuit:
    return replace(circuit, parts=tuple(p for p in circuit.parts if p.kind not in kinds))
