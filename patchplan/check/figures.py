"""The board's signals against the Reference: error figures, the best stretch of time, peaks against limits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.check.records import NodePeak
from patchplan.check.simulate import Traces
from patchplan.circuit.records import Circuit
from patchplan.quantity import engineering
from patchplan.reach.records import Reference

Array = NDArray[np.float64]

#: A peak may pass its limit by this fraction: the rounding of a reference that stands at the limit.
_LIMIT_SLACK = 1e-6
#: A node that is within its limit after this part of the run is over it only at first.
_FIRST_MOMENTS = 0.1
#: Stretches of time looked for.
_LARGEST_STRETCH = 0.1
_STRETCH_STEPS = 8


@dataclass(frozen=True, slots=True)
class Difference:
    """Error figures of one signal [% of the base]."""

    largest: float
    rms: float
    stretched: float
    frequency: float


def signal_of(circuit: Circuit, traces: Traces, net: str) -> Array:
    """Signal that a net carries, shape ``(n_times,)`` [problem units]."""
    node = circuit.nodes[net]
    return np.asarray((traces.of(net) - node.offset_volts) / (node.sign * node.volts_per_unit))


def error_base(circuit: Circuit, reference: Reference, signal: str) -> float:
    """What 100 % means: the signal's peak in the Reference, or half its swing where its node carries an offset."""
    values = reference.of(signal)
    base = np.abs(values).max()
    if circuit.nodes[circuit.watched[signal]].offset_volts:
        base = np.ptp(values) / 2.0
    return float(base) or 1.0


def settled(reference: Reference, signal: str, base: float, wait: float) -> NDArray[np.bool_]:
    """Rows of the Reference that count, shape ``(n_times,)``.

    A signal that jumps in the Reference cannot jump on a board: rows from the jump to ``wait`` after it are left out.

    Parameters
    ----------
    wait
        Time that the board's outputs need for a jump [problem time].
    """
    times, values = reference.times, reference.of(signal)
    counts = np.ones(len(times), bool)
    for row in np.flatnonzero((np.diff(times) == 0.0) & (np.abs(np.diff(values)) > 1e-6 * base)) + 1:
        counts[row : np.searchsorted(times, times[row] + wait, side="right")] = False
    return counts


def difference(
    times: Array, wanted: Array, rates: Array, found: Array, base: float, counts: NDArray[np.bool_]
) -> Difference:
    """Error figures of one signal.

    Parameters
    ----------
    times, wanted, rates
        The Reference: times, values and their time derivative, shape ``(n_times,)``.
    found
        The board's values at the same times.
    base
        What 100 % means [problem units].
    counts
        Rows that count.

    Notes
    -----
    The stretched figure compares found(t) with wanted((1 + a) t) at the a of least squares (Gauss-Newton from a = 0);
    a is the frequency error, positive where the board runs fast.
    """
    if not counts.any():
        return Difference(100.0, 100.0, 100.0, 0.0)
    weight = np.gradient(times) if len(times) > 1 else np.ones(1)
    weight = np.where(counts, np.abs(weight), 0.0) + 1e-300
    error = found - wanted
    largest = float(np.abs(error[counts]).max())
    rms = float(np.sqrt(np.average(error**2, weights=weight)))
    stretch = _best_stretch(times, wanted, rates, found, weight)
    stretched = np.abs(found - np.interp((1.0 + stretch) * times, times, wanted))
    inside = counts & ((1.0 + stretch) * times <= times[-1])
    least = float(stretched[inside].max())
    if least >= largest:
        least, stretch = largest, 0.0
    percent = 100.0 / base
    return Difference(percent * largest, percent * rms, percent * least, 100.0 * stretch)


def _best_stretch(times: Array, wanted: Array, rates: Array, found: Array, weight: Array) -> float:
    stretch, best, least = 0.0, 0.0, np.inf
    for _ in range(_STRETCH_STEPS):
        moved = (1.0 + stretch) * times
        inside = np.where(moved <= times[-1], weight, 0.0)
        error = found - np.interp(moved, times, wanted)
        square = float(np.average(error**2, weights=inside))
        if square >= least:
            break
        best, least = stretch, square
        slope = times * np.interp(moved, times, rates)
        curvature = float(np.sum(inside * slope**2))
        if curvature == 0.0:
            break
        stretch += float(np.sum(inside * slope * error)) / curvature
        stretch = float(np.clip(stretch, -_LARGEST_STRETCH, _LARGEST_STRETCH))
    return best


def node_peaks(circuit: Circuit, traces: Traces) -> tuple[NodePeak, ...]:
    """Peak of every signal node against its limit, and of every further op amp output against the swing."""
    limits = {net: node.limit_volts for net, node in circuit.nodes.items()}
    swing = max(-circuit.op_amp.low, circuit.op_amp.high)
    for part in circuit.parts:
        if part.kind == "op amp":
            limits.setdefault(part.nets[2], swing)
    peaks = []
    for net, limit in limits.items():
        volts = traces.of(net)
        row = int(np.argmax(np.abs(volts)))
        peak, time = abs(float(volts[row])), float(traces.times[row])
        over = traces.times[np.abs(volts) > limit * (1.0 + _LIMIT_SLACK)]
        if not over.size:
            peaks.append(NodePeak(net, peak, limit, True, time))
            continue
        first, last = float(over[0]), float(over[-1])
        cause = _cause(circuit, net, peak, limit, time) + _at_first(circuit, first, last)
        peaks.append(NodePeak(net, peak, limit, False, time, cause, first, last))
    return tuple(peaks)


def _at_first(circuit: Circuit, first: float, last: float) -> str:
    """A sentence on a node that is over its limit at the beginning only, "" on others."""
    if last > _FIRST_MOMENTS * circuit.duration:
        return ""
    return (
        f" It clips only in the first {engineering(last, 's')}, from {engineering(first, 's')} on: the start values or "
        "a step there need more room than all the rest of the run."
    )


def _cause(circuit: Circuit, net: str, peak: float, limit: float, time: float) -> str:
    role = "the limit of the node"
    for part in circuit.parts:
        if part.kind == "multiplier" and net in part.nets:
            full = circuit.multiplier.limit
            role = f"the full scale of multiplier {part.ref}" if limit >= full * (1 - 1e-9) else role
        elif part.kind == "op amp" and part.nets[2] == net and limit > circuit.multiplier.limit * (1 + 1e-9):
            role = f"the swing of op amp {part.ref}"
    return f"Node {net} reaches {peak:.3g} V at {time:.3g} s of circuit time; {role} is {limit:.3g} V."
