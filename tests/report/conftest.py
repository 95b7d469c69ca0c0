"""A plan made by hand: x'' = -4*x + drive, one board of three stages, figures made up but consistent."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from patchplan.check.records import Cause, Curve, NodePeak, SignalError, Verdict
from patchplan.circuit.records import Circuit, NodeMap, Part
from patchplan.equation.problem import Problem, Recording
from patchplan.equation.system import Knob, Row, Source, State, System, Term
from patchplan.equation.tree import Binary, Name, Number, Origin
from patchplan.equation.waveform import Waveform
from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage, Wire
from patchplan.ranges import NodeRange, Ranges
from patchplan.reach.records import Range, Reach, Reference
from patchplan.report.records import Plan
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import (
    Coefficient,
    Leg,
    MultiplierFigures,
    NodeScale,
    OpAmpFigures,
    Sizing,
    StageSizing,
    Target,
)  # fmt: skip

TEXT = 'title = "Plain oscillator"\nequations = ["x\'\' = -4*x + drive"]\nduration = 6.0\n'
RECORDING = Recording("data/drive.csv", (0.0, 3.0, 6.0), (0.0, 1.0 / 3.0, 0.0))
SCALE = 0.01
OP_AMP = OpAmpFigures("TL07x", 2e5, 1.9e7, 1.3e7, -12.0, 12.0, 3e-3, 65e-12, 2e3)
MULTIPLIER = MultiplierFigures("AD633", 10.0, 10.0, 6.28e6, 2e7, 5e-3, 0.01, 8e-7)


def patch() -> Patch:
    place = Origin("equations[0]", 0, 3)
    knob = Knob("k", Binary("/", Number(Fraction(1)), Name("m")), ("m",), Fraction(1), Fraction(1, 2), Fraction(2))
    return Patch(
        stages=(
            Stage("SRC1", "source", "drive", "drive", 1),
            Stage("INT1", "integrator", "x", "x", 1, (Wire("x_d", Fraction(1), place),), Fraction(1, 3)),
            Stage("INT2", "integrator", "x_d", "x'", -1, (Wire("x_n", Fraction(-4)), Wire("drive", Fraction(1)))),
            Stage("INV1", "inverter", "x_n", "x", -1, (Wire("x", Fraction(1)),)),
        ),
        watched={"x": "x", "x'": "x_d"},
        sources={"drive": Source("drive", Waveform(recording=RECORDING))},
        knobs={"k": knob},
        sign_stages=1,
        sign_stages_lower_bound=1,
    )  # fmt: skip


def sizing() -> Sizing:
    return Sizing(
        time_scale=SCALE,
        window=(1.3e-4, 0.5),
        limits=("the gain-bandwidth of the op amps", "the largest resistor and capacitor"),
        scales={
            "drive": NodeScale("drive", 20.0, 20.0 / 3, 12.0), "x": NodeScale("x", 20.0, 9.0, 12.0),
            "x_d": NodeScale("x_d", 41.2345678912345 / 4, 9.0, 12.0), "x_n": NodeScale("x_n", 20.0, 9.0, 12.0),
        },
        stages={
            "INT1": StageSizing("INT1", (Leg((47e3,)),), 1e-7, 0.0, (15e3, 10e3), 20 / 3),
            "INT2": StageSizing("INT2", (Leg((47e3,)), Leg((10e3, 1e3, 12e3))), 1e-7, 1e6, (0.0, 1e4), 0.0),
            "INV1": StageSizing("INV1", (Leg((10e3,)),), feedback=10e3),
        },
        coefficients=(Coefficient("x<-x_d", 1.0, 1.0003), Coefficient("x_d<-x_n", -4.0, -3.998)),
        notes=("x drifts by 0.1 V in a minute.",),
    )  # fmt: skip


def circuit(sources: dict[str, Source]) -> Circuit:
    parts = (
        Part("R1", "resistor", ("x_d", "int1_s"), 47e3, 0.01, "INT1"),
        Part("C1", "capacitor", ("int1_s", "x"), 1e-7, 0.02, "INT1", model="film"),
        Part("U1A", "op amp", ("0", "int1_s", "x"), stage="INT1", package="U1", section="A", model="TL07x"),
        Part("U1B", "op amp", ("0", "int2_s", "x_d"), stage="INT2", package="U1", section="B", model="TL07x"),
        Part("V1", "source", ("drive",), 20.0, stage="SRC1", model="drive"),
        Part("P1", "potentiometer", ("x_d", "w", "0"), 0.5, 0.1, "INT2", total=1e4),
    )
    nodes = {
        "drive": NodeMap("drive", "drive", 1, 20.0, 0.0, 12.0, "source"),
        "x": NodeMap("x", "x", 1, 20.0, 0.0, 12.0, "integrator"),
        "x_d": NodeMap("x_d", "x'", -1, 41.2345678912345 / 4, 2.5, 12.0, "integrator"),
        "x_n": NodeMap("x_n", "x", -1, 20.0, 0.0, 12.0, "inverter"),
    }
    watched = {"x": "x", "x'": "x_d"}
    return Circuit(parts, nodes, watched, OP_AMP, MULTIPLIER, (-15.0, 15.0), SCALE, 0.06, "once", sources)


def curves() -> tuple[np.ndarray, dict[str, np.ndarray]]:
    times = np.linspace(0, 6, 601)
    x = 0.45 * np.cos(2 * times + 0.7)
    return times, {"x": x, "x'": np.gradient(x, times), "drive": np.interp(times, RECORDING.times, RECORDING.values)}


def verdict(times: np.ndarray, true: dict[str, np.ndarray]) -> Verdict:
    built = {name: values * (1 + 0.003 * np.sin(times)) for name, values in true.items()}
    watched = [
        Curve(name, times, true[name], built[name] + 0.002 * (name == "x'") * np.sin(5 * times)) for name in ("x", "x'")
    ]
    volts = {
        "drive": 20 * built["drive"], "x": 20 * built["x"], "x_n": -20 * built["x"],
        "x_d": 2.5 - 41.2345678912345 / 4 * built["x'"],
    }  # fmt: skip
    return Verdict(
        "follows", 0.31, 0.12, 0.9, None,
        (SignalError("x", 0.31, 0.12, 0.9, 0.2, -0.01), SignalError("x'", 0.25, 0.1, 0.8, 0.2, -0.01)),
        tuple(NodePeak(node, float(np.abs(v).max()), 12.0, True) for node, v in volts.items()),
        (Cause("gain-bandwidth of INT2", 0.22), Cause("value of R1", 0.05), Cause("offset of INV1", 0.003)),
        tuple(watched), times * SCALE, volts, ("Measure C1, or the boards spread.",),
    )  # fmt: skip


@pytest.fixture(scope="session")
def plan(tmp_path_factory: pytest.TempPathFactory) -> Plan:
    folder: Path = tmp_path_factory.mktemp("problem")
    (folder / "data").mkdir()
    (folder / "data" / "drive.csv").write_text("time,value\n0,0\n3,0.333333333333\n6,0\n")
    times, true = curves()
    drawn = patch()
    names = ("x", "x'", "drive")
    values = np.array([true[n] for n in names])
    rates = np.gradient(values, times, axis=1)
    rows = (Row("x", (Term(Fraction(1), (("x'", 1),)),)), Row("x'", (Term(Fraction(-4), (("x", 1),)),)))
    system = System(
        (State("x", Fraction(1, 3)), State("x'", Fraction(0))), rows, (), tuple(drawn.sources.values()), (), (),
        (("x", 0), ("x'", 0)), Fraction(6), "s", Fraction(1),
    )  # fmt: skip
    signal_of = {s.node: s.signal for s in drawn.stages}
    nodes = {n: NodeRange(n, float(true[s].min()), float(true[s].max()), 1.0, "proved") for n, s in signal_of.items()}
    ranges = Ranges(nodes, times, {n: true[s] for n, s in signal_of.items()}, {})
    known = {n: Range(n, float(true[n].min()), float(true[n].max()), "proved") for n in names}
    reach = Reach(Reference(names, times, values, rates), known, ())
    none = np.zeros((2, 0, 0))
    sensitivity = Sensitivity(("x", "x'"), np.array([0.45, 0.9]), np.zeros(0), (), none, (), none, none, {})
    target = Target((1e4,), (1e-7,), 0.01, 0.02, 10.0, 0.001, OP_AMP, MULTIPLIER, 100.0, 1e-10)
    problem = Problem("Plain oscillator", (), Fraction(6), text=TEXT, file="plain.toml", folder=folder)
    return Plan(
        problem, system, reach, Form(system), drawn, ranges, sensitivity, target, sizing(),
        circuit(dict(drawn.sources)), verdict(times, true), {"speed": 100.0},
    )  # fmt: skip
