"""The nodal model of a board: one linear map from states and inputs to every voltage and every rate.

The parts of a Circuit are all that is read. States are the capacitors' voltages, the poles of the op amps and those of
the multipliers; inputs are the sources' volts and the constant 1 (references, source offsets, bias currents).
"""

from __future__ import annotations

from collections.abc import Container
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from patchplan.check.layout import Layout, Matrix, layout_of
from patchplan.circuit.records import Circuit, Part

Array = NDArray[np.float64]
#: Above this many states the matrices are kept sparse; below it dense products are faster (measured).
DENSE_LIMIT = 150
#: Columns solved for at a time, so that no dense array holds them all.
_BLOCK = 64


@dataclass(frozen=True)
class Network:
    """The board in one mode of its switches.

    With x the states and u the inputs, ``rate @ x + rate_input @ u`` gives the rows: capacitor rates [V/s], op amps'
    drive w_t*(v_plus - v_minus) [V/s], multipliers' drive w_m*(z - m) [V/s] without the product, multipliers' x1 - x2
    [V], multipliers' y1 - y2 [V].

    Attributes
    ----------
    states
        Refs of the parts that hold the states: capacitors, op amps, multipliers; shape ``(n_states,)`` of x.
    n_capacitors, n_op_amps, n_multipliers
        How many of each.
    sources
        Source parts in the order of the inputs; the last input is 1.
    nets
        All nets, rows of ``voltage`` and ``voltage_input``.
    slew, leak, clamp, low, high
        Of op amps, then multipliers, shape ``(n_op_amps + n_multipliers,)``: [V/s], [1/s], [1/s], [V], [V].
    product
        Of multipliers: w_m / scale [1/(V s)].
    capacitor_nets
        (a, b) of every capacitor state.
    warnings
        Sentences: floating nets, two outputs on one net.
    """

    states: tuple[str, ...]
    n_capacitors: int
    n_op_amps: int
    n_multipliers: int
    sources: tuple[Part, ...]
    nets: tuple[str, ...]
    voltage: Matrix
    voltage_input: Matrix
    rate: Matrix
    rate_input: Matrix
    slew: Array
    leak: Array
    clamp: Array
    low: Array
    high: Array
    product: Array
    capacitor_nets: tuple[tuple[str, str], ...]
    warnings: tuple[str, ...]


def idealised(
    circuit: Circuit,
    *,
    gain: bool = True,
    bandwidth: bool = True,
    slew: bool = True,
    bias: bool = True,
    switches: bool = True,
    multiplier: bool = True,
) -> Circuit:
    """Circuit with some causes of error taken away.

    Parameters
    ----------
    circuit
        The board.
    gain, bandwidth, slew, bias, switches, multiplier
        False takes the cause away: finite gain, bandwidth and slew of the op amps, bias currents, switch resistance,
        bandwidth and slew of the multipliers. A factor of 1000 stands for "without limit"; more would cost digits.
    """
    amp, times = circuit.op_amp, circuit.multiplier
    amp = replace(
        amp,
        gain=amp.gain if gain else 1e12,
        gain_bandwidth=amp.gain_bandwidth * (1.0 if bandwidth else 1e3),
        slew=amp.slew * (1.0 if slew else 1e3),
        bias=amp.bias if bias else 0.0,
    )
    times = replace(
        times,
        bandwidth=times.bandwidth * (1.0 if multiplier else 1e3),
        slew=times.slew * (1.0 if multiplier else 1e3),
        bias=times.bias if bias else 0.0,
    )
    parts = circuit.parts
    if not switches:
        parts = tuple(replace(p, value=p.value * 1e-4) if p.kind == "switch" else p for p in parts)
    return replace(circuit, parts=parts, op_amp=amp, multiplier=times)


def build_network(circuit: Circuit, mode: str = "operate", high: Container[str] = ()) -> Network:
    """Nodal model of the board.

    Parameters
    ----------
    circuit
        The board; only its parts, the op amp's and multiplier's figures and the offsets of source nodes are used.
    mode
        ``operate`` or ``hold``: which switches are closed.
    high
        Sources whose control lines are high.

    Notes
    -----
    Modified nodal analysis (Ho, Ruehli and Brennan 1975) with capacitors as voltage sources of known voltage. A
    positive bias current flows from the net into the input. Decoupling capacitors are left out, rails being stiff.
    """
    from scipy.sparse import vstack

    layout = layout_of(circuit, mode, high)
    solution = _solve(layout)
    n_free = len(layout.free)
    voltage = vstack([solution[:n_free], layout.driven_rows]).tocsr()
    rows = {net: i for i, net in enumerate(layout.nets)}
    current = solution[n_free:]
    rate = _rate_rows(circuit, layout, rows, voltage, current)
    op_amp, times = circuit.op_amp, circuit.multiplier
    n_a, n_m = len(layout.op_amps), len(layout.multipliers)
    (voltage_x, voltage_u), (rate_x, rate_u) = (_parted(m, layout.n_states) for m in (voltage, rate))

    def poles(of_op_amp: float, of_multiplier: float) -> Array:
        return np.repeat([of_op_amp, of_multiplier], [n_a, n_m])

    return Network(
        tuple(p.ref for p in (*layout.capacitors, *layout.op_amps, *layout.multipliers)),
        len(layout.capacitors),
        n_a,
        n_m,
        layout.sources,
        layout.nets,
        voltage_x,
        voltage_u,
        rate_x,
        rate_u,
        slew=poles(op_amp.slew, times.slew),
        leak=poles(op_amp.gain_bandwidth / op_amp.gain, 0.0),
        clamp=poles(op_amp.gain_bandwidth, times.bandwidth),
        low=poles(op_amp.low, -times.limit),
        high=poles(op_amp.high, times.limit),
        product=np.full(n_m, times.bandwidth / times.scale),
        capacitor_nets=tuple((p.nets[0], p.nets[1]) for p in layout.capacitors),
        warnings=layout.warnings,
    )


def _parted(matrix: Matrix, n_states: int) -> tuple[Matrix, Matrix]:
    """The columns of the states and those of the inputs, dense on small boards."""
    parts = matrix[:, :n_states], matrix[:, n_states:]
    return parts if n_states > DENSE_LIMIT else (parts[0].toarray(), parts[1].toarray())


def _solve(layout: Layout) -> Matrix:
    """Free nets' voltages, then capacitors' currents, over states and inputs; sparse, as stages hardly share nets."""
    from scipy.sparse import coo_array, csr_array, hstack
    from scipy.sparse.linalg import splu

    free, driven, n_free, n_c = layout.free, layout.driven, len(layout.free), len(layout.capacitors)
    size = n_free + n_c
    if size == 0:
        return csr_array((0, layout.n_columns))
    entries: list[tuple[int, int, float]] = []
    outside: list[tuple[int, int, float]] = []

    def put(row: int, net: str, value: float) -> None:
        if net in free:
            entries.append((row, free[net], value))
        else:
            outside.append((row, driven[net], value))

    for a, b, ohm in layout.resistors:
        for here, there in ((a, b), (b, a)):
            if here in free:
                put(free[here], here, 1.0 / ohm)
                put(free[here], there, -1.0 / ohm)
    for i, part in enumerate(layout.capacitors):
        for net, sign in zip(part.nets, (1.0, -1.0), strict=True):
            put(n_free + i, net, sign)
            if net in free:
                entries.append((free[net], n_free + i, sign))
    own = [(n_free + i, i, 1.0) for i in range(n_c)]
    own += [(free[net], layout.n_columns - 1, -current) for net, current in layout.drawn.items() if net in free]

    def matrix(items: list[tuple[int, int, float]], columns: int) -> Matrix:
        i, j, value = zip(*items, strict=True) if items else ((), (), ())
        return coo_array((np.array(value, float), (np.array(i, int), np.array(j, int))), shape=(size, columns)).tocsc()

    right = (matrix(own, layout.n_columns) - matrix(outside, len(driven)) @ layout.driven_rows).tocsc()
    factors = splu(matrix(entries, size).tocsc())
    firsts = range(0, layout.n_columns, _BLOCK)
    return hstack([csr_array(factors.solve(right[:, i : i + _BLOCK].toarray())) for i in firsts]).tocsr()


def _rate_rows(circuit: Circuit, layout: Layout, rows: dict[str, int], voltage: Matrix, current: Matrix) -> Matrix:
    from scipy.sparse import diags_array, eye_array, vstack

    def volts(parts: tuple[Part, ...], pin: int) -> Matrix:
        return voltage[[rows[p.nets[pin]] for p in parts]]

    amps, times = layout.op_amps, layout.multipliers
    farads = np.array([p.value for p in layout.capacitors])
    pole = eye_array(len(times), layout.n_columns, k=layout.n_states - len(times))
    return vstack([
        diags_array(1.0 / farads) @ current,
        circuit.op_amp.gain_bandwidth * (volts(amps, 0) - volts(amps, 1)),
        circuit.multiplier.bandwidth * (volts(times, 4) - pole),
        volts(times, 0) - volts(times, 1),
        volts(times, 2) - volts(times, 3),
    ]).tocsr()  # fmt: skip
