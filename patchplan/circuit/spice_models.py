"""SPICE subcircuits of the op amp and the multiplier; the check integrates the same equations."""

from __future__ import annotations

from patchplan.sizing.records import MultiplierFigures, OpAmpFigures

#: Capacitance of every pole node [F]; it only sets the size of the currents in the subcircuits.
POLE_FARAD = 1e-9
#: Least resistance of a switch and of an end of a potentiometer [ohm].
LEAST_OHM = 1e-3


def num(value: float) -> str:
    """Nine digits, the form of every number in a netlist."""
    return f"{value:.9g}"


def op_amp_model(figures: OpAmpFigures) -> list[str]:
    """Lines of the subcircuit ``opamp plus minus out``.

    dp/dt = slew*tanh(w_t*(v_plus - v_minus)/slew) - (w_t/A0)*p, and -w_t times what p is beyond the swing; out = p. The
    bias current flows into both inputs.
    """
    w_t, slew = figures.gain_bandwidth, figures.slew
    drive = f"{num(slew * POLE_FARAD)}*tanh({num(w_t / slew)}*(v(plus)-v(minus)))"
    return [
        f"* {figures.name}: gain {num(figures.gain)}, gain-bandwidth {num(w_t)} rad/s, slew {num(slew)} V/s,",
        f"* swing {num(figures.low)} V to {num(figures.high)} V, bias current {num(figures.bias)} A",
        ".subckt opamp plus minus out",
        f"Bdrive 0 p I={drive}",
        f"Cp p 0 {num(POLE_FARAD)}",
        f"Rp p 0 {num(figures.gain / w_t / POLE_FARAD)}",
        _clamp(w_t, figures.low, figures.high),
        "Eout out 0 p 0 1",
        f"Iplus plus 0 {num(figures.bias)}",
        f"Iminus minus 0 {num(figures.bias)}",
        ".ends opamp",
    ]


def multiplier_model(figures: MultiplierFigures) -> list[str]:
    """Lines of the subcircuit ``mult x1 x2 y1 y2 z w``.

    dm/dt = slew*tanh(w_m*((x1-x2)*(y1-y2)/scale + z - m)/slew), and -w_m times what m is beyond full scale; w = m.
    """
    w_m, slew = figures.bandwidth, figures.slew
    aim = f"(v(x1)-v(x2))*(v(y1)-v(y2))*{num(1 / figures.scale)}+v(z)-v(p)"
    return [
        f"* {figures.name}: scale {num(figures.scale)} V, bandwidth {num(w_m)} rad/s, slew {num(slew)} V/s,",
        f"* full scale {num(figures.limit)} V, bias current {num(figures.bias)} A",
        ".subckt mult x1 x2 y1 y2 z w",
        f"Bdrive 0 p I={num(slew * POLE_FARAD)}*tanh({num(w_m / slew)}*({aim}))",
        f"Cp p 0 {num(POLE_FARAD)}",
        _clamp(w_m, -figures.limit, figures.limit),
        "Eout w 0 p 0 1",
        *(f"I{pin} {pin} 0 {num(figures.bias)}" for pin in ("x1", "x2", "y1", "y2", "z")),
        ".ends mult",
    ]


def _clamp(rate: float, low: float, high: float) -> str:
    return f"Bclamp p 0 I={num(rate * POLE_FARAD)}*(uramp(v(p)-({num(high)}))-uramp(({num(low)})-v(p)))"
