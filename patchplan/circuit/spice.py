"""The Circuit as a netlist that a general SPICE simulator runs unchanged."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping

import numpy as np
from numpy.typing import NDArray

from patchplan.circuit.records import Circuit, NodeMap, Part
from patchplan.circuit.spice_models import LEAST_OHM, multiplier_model, num, op_amp_model
from patchplan.circuit.spice_sources import SourceText

Array = NDArray[np.float64]

#: An open switch [ohm].
_OPEN = 1e12
#: The trapezoidal rule takes nothing away from a lossless loop; the tolerances hold the summing nodes to microvolts.
_OPTIONS = ".options method=trap reltol=1e-6 vntol=1e-8 abstol=1e-12 chgtol=1e-16"


def largest_step(duration: float, rate: float, gain: float = 0.0) -> float:
    """Largest time step that keeps a loop of angular frequency ``rate`` in phase [s].

    The trapezoidal rule is late by (w h)^2/12 of each cycle's phase, as if all integrators were slow by that share;
    1e-3 rad over the run is allowed, or 1e-3 of the peak where signals move by more than the phase.

    Parameters
    ----------
    duration
        Run [circuit s].
    rate
        Fastest rate of the signals [rad/s].
    gain
        How much a signal moves, of its peak, per relative change of the integrators' speed.
    """
    most = duration / 200
    if rate <= 0:
        return most
    # A tenth of the step that the phase asks for is the least: beyond, no step makes two simulators agree.
    moved = min(max(gain, rate * duration), 100 * rate * duration)
    return min(most, math.sqrt(12e-3 / moved) / rate)


def lasting_rate(times: Array, rates: Array) -> float:
    """The constant rate that makes the trapezoidal rule as late over a run as the changing rates of its signals do.

    A fast transient that dies out is left to the simulator's own step control; the lag of a loop that goes on adds up.

    Parameters
    ----------
    times
        Shape ``(n_times,)``, rising.
    rates
        Shape ``(n_signals, n_times)``: magnitude of x' over the peak of x, in 1 over the unit of ``times``.
    """
    from scipy.integrate import trapezoid

    fastest = np.abs(rates).max(axis=0, initial=0.0)
    return float((trapezoid(fastest**3, times) / (times[-1] - times[0])) ** (1 / 3))


def spice_text(circuit: Circuit, start: Mapping[str, float], *, max_step: float, title: str = "patchplan board") -> str:
    """Netlist of the nominal board in operate, from its start to the end of the run.

    Parameters
    ----------
    start
        Net -> volts at the start of operate; outputs and inverting inputs count.
    max_step
        Largest time step [circuit s], see :func:`largest_step`.
    """
    # A title is the user's text: it must not begin a line of its own.
    lines = [f"* {' '.join(title.split())}", *_head(circuit)]
    kinds = {p.kind for p in circuit.parts}
    lines += op_amp_model(circuit.op_amp) if "op amp" in kinds else []
    lines += multiplier_model(circuit.multiplier) if "multiplier" in kinds else []
    sources = SourceText(circuit)
    for part in circuit.parts:
        if part.kind == "source":
            sources.add(part)
        elif part.control:
            sources.add_switch(part)
        else:
            lines += _element(part)
    lines += [*sources.lines, *_start(circuit, start), _OPTIONS]
    lines += [f".tran {num(max_step)} {num(circuit.duration)} 0 {num(max_step)}", ".end", ""]
    return "\n".join(lines)


def _head(circuit: Circuit) -> Iterator[str]:
    yield f"* One unit of problem time lasts {num(circuit.time_scale)} s here."
    for node in circuit.nodes.values():
        yield f"* {_meaning(node)}"
    for signal, net in circuit.watched.items():
        yield f"* {signal} is brought out at {net}."


def _meaning(node: NodeMap) -> str:
    offset = f" + {num(node.offset_volts)} V" if node.offset_volts else ""
    return f"v({node.node}) = {num(node.sign * node.volts_per_unit)} V * ({node.signal}){offset}, {node.role}"


def _element(part: Part) -> list[str]:
    nets = " ".join(part.nets)
    if part.kind in ("resistor", "capacitor"):
        return [f"{part.ref} {nets} {num(part.value)}"]
    if part.kind == "potentiometer":
        return _potentiometer(part)
    if part.kind == "switch":
        value = max(part.value, LEAST_OHM) if part.closed == "operate" else _OPEN
        return [f"* {part.ref}: closed in {part.closed}", f"R{part.ref} {nets} {num(value)}"]
    if part.kind == "op amp":
        return [f"X{part.ref} {nets} opamp"]
    if part.kind == "multiplier":
        return [f"X{part.ref} {nets} mult"]
    if part.kind == "reference":
        return [f"V{part.ref} {nets} 0 DC {num(part.value)}"]
    return [f"* {part.ref}: {num(part.value)} F from {part.nets[0]} to ground at {part.package}"]


def _potentiometer(part: Part) -> list[str]:
    end_a, wiper, end_b = part.nets
    halves = ((end_a, wiper, part.value, "a"), (wiper, end_b, 1 - part.value, "b"))
    lines = [f"* {part.ref}: {num(part.total)} ohm, set to {num(part.value)}"]
    for a, b, share, end in halves:
        if a != b:
            lines.append(f"R{part.ref}{end} {a} {b} {num(max(share * part.total, LEAST_OHM))}")
    return lines


def _start(circuit: Circuit, start: Mapping[str, float]) -> Iterator[str]:
    """Start values of every output, inverting input and inner pole."""
    for part in circuit.parts:
        if part.kind in ("op amp", "multiplier"):
            out = part.nets[-1]
            volts = num(start[out])
            yield f".ic v({out})={volts} v(x{part.ref.lower()}.p)={volts}"
        if part.kind == "op amp":
            yield f".ic v({part.nets[1]})={num(start[part.nets[1]])}"
