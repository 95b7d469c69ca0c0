"""Small boards built by hand, part by part."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

from patchplan.circuit.records import GROUND, Circuit, NodeMap, Part
from patchplan.sizing.records import MultiplierFigures, OpAmpFigures

OP_AMP = OpAmpFigures("jfet", 2e5, 2 * math.pi * 3e6, 13e6, -12.0, 12.0, 3e-3, 65e-12, 2e3)
MULTIPLIER = MultiplierFigures("four quadrant", 10.0, 10.0, 2 * math.pi * 1e6, 20e6, 5e-3, 0.01, 0.8e-6)
SWITCH_OHM = 100.0
#: Published and worked figures by name, see cases/README.md.
FORMULAS = {
    f["id"]: f["example"]
    for f in json.loads((Path(__file__).parents[1] / "cases" / "formulas.json").read_text(encoding="utf-8"))["formulas"]
}


class Board:
    """Collects parts and nodes and gives a Circuit."""

    def __init__(self, *, run: str = "once", time_scale: float = 1.0, duration: float = 1.0, op_amp=OP_AMP) -> None:
        self.parts: list[Part] = [Part("V1", "reference", ("vref",), 10.0), Part("V2", "reference", ("vneg",), -10.0)]
        self.nodes: dict[str, NodeMap] = {}
        self.run, self.time_scale, self.duration, self.op_amp = run, time_scale, duration, op_amp

    def add(self, kind: str, *nets: str, value: float = 0.0, **more: object) -> str:
        letter = {"resistor": "R", "capacitor": "C", "op amp": "U", "multiplier": "M", "switch": "S", "source": "E"}
        letter = letter.get(kind, "P")
        ref = f"{letter}{sum(p.ref.startswith(letter) for p in self.parts) + 1}"
        self.parts.append(Part(ref, kind, nets, value, **more))
        return ref

    def node(
        self, net: str, signal: str, sign: int, volts_per_unit: float, *, limit: float = 12.0, offset: float = 0.0
    ) -> None:
        self.nodes[net] = NodeMap(net, signal, sign, volts_per_unit, offset, limit, "")

    def summer(self, out: str, inputs: list[tuple[str, float]], feedback: float, *, stage: str = "") -> None:
        for net, ohm in inputs:
            self.add("resistor", net, f"{out}_in", value=ohm, stage=stage)
        self.add("resistor", f"{out}_in", out, value=feedback, stage=stage)
        self.add("op amp", GROUND, f"{out}_in", out, stage=stage)

    def integrator(self, out: str, inputs: list[tuple[str, float]], farad: float, *, start: float = 0.0,
                   leak: float = 0.0, hold: bool = True, stage: str = "") -> None:  # fmt: skip
        summing = f"{out}_sum" if hold else f"{out}_in"
        # All legs share the operate switch, so each is shortened to pass the current that is wanted of it.
        share = 1.0 - SWITCH_OHM * sum(1.0 / ohm for _, ohm in inputs) if hold else 1.0
        for net, ohm in inputs:
            self.add("resistor", net, summing, value=ohm * share, stage=stage)
        self.add("capacitor", f"{out}_in", out, value=farad, stage=stage)
        self.add("op amp", GROUND, f"{out}_in", out, stage=stage)
        if leak:
            self.add("resistor", out, f"{out}_in", value=leak, stage=stage)
        if not hold:
            return
        self.add("switch", summing, f"{out}_in", value=SWITCH_OHM, closed="operate", stage=stage)
        self.add("switch", f"{out}_hold", f"{out}_in", value=SWITCH_OHM, closed="hold", stage=stage)
        self.add("resistor", out, f"{out}_hold", value=10e3, stage=stage)
        if start:
            self.add(
                "resistor", "vneg" if start > 0 else "vref", f"{out}_hold", value=10e3 * 10.0 / abs(start), stage=stage
            )

    def multiplier(self, out: str, first: str, second: str, *, negative: bool = False) -> None:
        x = (GROUND, first) if negative else (first, GROUND)
        self.add("multiplier", *x, second, GROUND, GROUND, out)

    def circuit(self, watched: dict[str, str], **more: object) -> Circuit:
        board = Circuit(tuple(self.parts), self.nodes, watched, self.op_amp, MULTIPLIER, (-15.0, 15.0), self.time_scale,
                        self.duration, self.run)  # fmt: skip
        return replace(board, **more)


def oscillator(
    *, cycles: float = 3.0, ohm: float = 10e3, farad: float = 10e-9, op_amp=OP_AMP, **more: object
) -> Circuit:
    """x'' = -x with x(0) = 1, x'(0) = 0: two integrators and an inverter, 8 V per unit.

    Signals: net x carries -x, net v carries x', net vi carries -x'.
    """
    board = Board(time_scale=ohm * farad, duration=2 * math.pi * cycles * ohm * farad, op_amp=op_amp)
    board.integrator("x", [("v", ohm)], farad, start=-8.0, stage="x")
    board.integrator("v", [("xi", ohm)], farad, stage="v")
    board.summer("xi", [("x", 10e3)], 10e3, stage="xi")
    board.node("x", "x", -1, 8.0)
    board.node("v", "v", 1, 8.0)
    board.node("xi", "x", 1, 8.0)
    return board.circuit({"x": "x", "v": "v"}, **more)


def van_der_pol(mu: float = 1.0, *, duration: float = 20.0) -> Circuit:
    """x' = v, v' = mu*(1 - x^2)*v - x, x(0) = 2, v(0) = 0; at 4 V and 2.5 V per unit, 1 ms per unit of time."""
    unit, farad = 1e-3, 10e-9

    def ohm(gain: float) -> float:
        return unit / (gain * farad)

    board = Board(time_scale=unit, duration=duration * unit)
    x_volts, v_volts = 4.0, 2.5
    square, product = x_volts**2 / 10.0, x_volts**2 * v_volts / 100.0
    board.integrator("x", [("v", ohm(x_volts / v_volts))], farad, start=-2.0 * x_volts, stage="x")
    board.integrator("v", [("xi", ohm(v_volts / x_volts)), ("vi", ohm(mu)), ("p", ohm(mu * v_volts / product))], farad,
                     stage="v")  # fmt: skip
    board.summer("xi", [("x", 10e3)], 10e3, stage="xi")
    board.summer("vi", [("v", 10e3)], 10e3, stage="vi")
    board.multiplier("q", "x", "x")
    board.multiplier("p", "q", "v")
    board.node("x", "x", -1, x_volts)
    board.node("v", "v", 1, v_volts)
    board.node("xi", "x", 1, x_volts)
    board.node("vi", "v", -1, v_volts)
    board.node("q", "x*x", 1, square, limit=10.0)
    board.node("p", "x*x*v", 1, product, limit=10.0)
    return board.circuit({"x": "x", "v": "v"})
