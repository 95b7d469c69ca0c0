"""The verdict on a board: simulate it, compare it with the Reference, say where the error comes from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from patchplan.check.figures import Difference, difference, error_base, node_peaks, settled, signal_of
from patchplan.check.horizon import horizon_of
from patchplan.check.records import Cause, Curve, NodePeak, SignalError, Verdict
from patchplan.check.simulate import Traces, simulate
from patchplan.check.spread import spread_of
from patchplan.check.worst import other_runs, peaks_over
from patchplan.circuit.records import DC_LIMIT, Circuit
from patchplan.equation.system import System
from patchplan.patch.records import Patch
from patchplan.quantity import engineering
from patchplan.reach.records import Reference, WorstCase
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, Target

Array = NDArray[np.float64]

#: Below this share of the slew rate the limit makes 3e-5 of an op amp's own lag: nothing to run for.
_SLEW_SHARE = 0.01
#: Above this many parts each run takes seconds, and the limits are told apart no further than rounding and the rest.
_MANY_PARTS = 450
#: How far off a switch's resistance is in the budget (common practice, no source); its nominal value is counted in R.
_SWITCH_OFF = 1.1
#: Outputs that never clip reach this many times as far.
_ROOM = 1e3
#: Time constants of an op amp, 1/w_t each, that an output is given to follow a jump.
_SETTLING = 100.0
#: Spread above which a linear estimate says little but that boards differ [%] (compared with boards drawn at random).
_ROUGH = 20.0
#: What lowers a cause of spread.
REMEDY = {
    "resistors": "Resistors of a closer tolerance or trimmers would lower it.",
    "capacitors": "Measured capacitors, or capacitors of a closer tolerance, would lower it.",
    "reference": "A closer reference would lower it.",
    "offsets": "An op amp of lower offset, or trimmed offsets, would lower it.",
    "multipliers": "A multiplier of a better class, or one with its scale and offsets trimmed, would lower it.",
}


def check_circuit(
    circuit: Circuit,
    reference: Reference,
    sensitivity: Sensitivity,
    patch: Patch,
    sizing: Sizing,
    target: Target,
    *,
    system: System,
    accept: float = 5.0,
    budget: bool = True,
    others: Sequence[WorstCase] = (),
) -> Verdict:
    """Simulate the nominal board and compare it with the Reference.

    Parameters
    ----------
    circuit
        The board; the simulation sees its parts and nets alone.
    reference
        The truth.
    sensitivity, patch, sizing, target
        Used for the spread between boards and the horizon only.
    system
        Decides whether there can be a horizon at all.
    accept
        Largest error at which the board follows its equation [% of peak].
    budget
        Whether the causes of error are told apart; it takes one run for each.
    others
        Further runs under inputs known only by their bounds: they count in the peaks of all nodes, each in the error
        of its own signal.
    """
    traces = simulate(circuit, times=reference.times * circuit.time_scale, waveforms=reference.waveforms)
    horizon = horizon_of(system, sensitivity, patch, sizing)
    rows = _rows_compared(reference, traces, horizon)
    spreads = spread_of(sensitivity, patch, sizing, target)
    within = sensitivity.times <= (np.inf if horizon is None else horizon)
    spread = dict(zip(sensitivity.watched, (100.0 * _total(spreads, within).max(axis=1)).tolist(), strict=True))
    more = other_runs(circuit, others)
    signals = tuple(
        _signal_error(circuit, name, _compare(circuit, reference, traces, name, rows), spread.get(name, 0.0), more)
        for name in circuit.watched
    )
    nodes = peaks_over(circuit, node_peaks(circuit, traces), more)
    failed = next((t.failure for t in (traces, *(t for _, t in more)) if t.failure), "")
    largest = max((s.max_error_percent for s in signals), default=0.0)
    causes = _budget(circuit, reference, traces, rows) if budget and not traces.failure else ()
    return Verdict(
        verdict=_word(nodes, failed, largest, accept),
        max_error_percent=largest,
        rms_error_percent=max((s.rms_error_percent for s in signals), default=0.0),
        spread_percent=max(spread.values(), default=0.0),
        horizon=horizon, signals=signals, nodes=nodes,
        budget=causes,
        curves=_curves(circuit, reference, traces),
        times=traces.times,
        volts={net: traces.of(net) for net in circuit.nodes},
        warnings=_warnings(traces, failed, nodes, horizon, spreads, within, accept, _jumps(circuit, reference)),
    )  # fmt: skip


def _word(nodes: tuple[NodePeak, ...], failed: str, largest: float, accept: float) -> str:
    if failed or not all(n.ok for n in nodes):
        return "overload"
    return "follows" if largest <= accept else "inaccurate"


def _compare(circuit: Circuit, reference: Reference, traces: Traces, name: str, rows: int) -> Difference:
    found = signal_of(circuit, traces, circuit.watched[name])[:rows]
    rows = len(found)
    base = error_base(circuit, reference, name)
    index = reference.names.index(name)
    counts = settled(reference, name, base, _wait(circuit))[:rows]
    wanted, rates = reference.values[index, :rows], reference.rates[index, :rows]
    return difference(reference.times[:rows], wanted, rates, found, base, counts)


def _jumps(circuit: Circuit, reference: Reference) -> list[str]:
    """Which watched signals jump, and for how long after each jump their error is not counted."""
    jumping = [n for n in circuit.watched if not settled(reference, n, error_base(circuit, reference, n), 0.0).all()]
    if not jumping:
        return []
    wait = engineering(_wait(circuit) * circuit.time_scale, "s")
    return [
        f"{', '.join(jumping)} jump{'s' if len(jumping) == 1 else ''}, which no board can: errors count from {wait} of "
        f"circuit time after each jump."
    ]


def _wait(circuit: Circuit) -> float:
    """Time that outputs are given to follow a jump [problem time]."""
    amp = circuit.op_amp
    return (_SETTLING / amp.gain_bandwidth + (amp.high - amp.low) / amp.slew) / circuit.time_scale


def _total(spreads: Mapping[str, Array], within: NDArray[np.bool_]) -> Array:
    total: Array = np.sqrt(sum((s**2 for s in spreads.values()), np.zeros(1)))[:, within]
    return total


def _rows_compared(reference: Reference, traces: Traces, horizon: float | None) -> int:
    end = np.inf if horizon is None else horizon
    return min(len(traces.times), max(int(np.searchsorted(reference.times, end, side="right")), 1))


def _signal_error(
    circuit: Circuit, name: str, first: Difference, spread: float, runs: list[tuple[WorstCase, Traces]]
) -> SignalError:
    """The larger of each error over the run of the Reference and the signal's own worst case."""
    own = [_compare(circuit, c.reference, t, name, len(t.times)) for c, t in runs if c.signal == name]
    errors = [first, *own]
    largest, rms, stretched = (max(getattr(e, part) for e in errors) for part in ("largest", "rms", "stretched"))
    return SignalError(name, largest, rms, spread, stretched, max((e.frequency for e in errors), key=abs))


def _curves(circuit: Circuit, reference: Reference, traces: Traces) -> tuple[Curve, ...]:
    rows = len(traces.times)
    return tuple(
        Curve(name, reference.times[:rows], reference.of(name)[:rows], signal_of(circuit, traces, net))
        for name, net in circuit.watched.items()
    )


def _budget(circuit: Circuit, reference: Reference, nominal: Traces, rows: int) -> tuple[Cause, ...]:
    """The budget; where nodes are over their limit, what clipping does comes off first, and the rest is of a board
    whose outputs reach as far as asked. Without a run of that board nothing can be told apart, and there is none.
    """
    over = [peak.node for peak in node_peaks(circuit, nominal) if not peak.ok]
    if not over:
        return _causes(circuit, reference, nominal, rows)
    amp, times = circuit.op_amp, circuit.multiplier
    roomy = replace(
        circuit,
        op_amp=replace(amp, low=_ROOM * amp.low, high=_ROOM * amp.high),
        multiplier=replace(times, limit=_ROOM * times.limit),
    )
    free = simulate(roomy, times=nominal.times[:rows], waveforms=reference.waveforms)
    if free.failure:
        return ()
    where = over[0] if len(over) == 1 else f"{over[0]} and {len(over) - 1} more"
    clipping = Cause(f"clipping (overload of {where})", _apart(circuit, reference, nominal, free))
    return tuple(sorted((clipping, *_causes(roomy, reference, free, rows)), key=_by_size))


def _causes(circuit: Circuit, reference: Reference, nominal: Traces, rows: int) -> tuple[Cause, ...]:
    """Error of the board without any limit but its rounded values, and what each limit changes.

    The operate switches count in R, so that only what they may be off by can do harm: that row stands last.
    """
    kinds = {p.kind for p in circuit.parts}
    times = nominal.times[:rows]

    def run(board: Circuit, **ideal: bool) -> Traces:
        return simulate(board, times=times, waveforms=reference.waveforms, **ideal)

    limits = {"finite gain": "gain", "bandwidth": "bandwidth", "slew": "slew", "bias current": "bias"}
    if "multiplier" in kinds:
        limits["multiplier bandwidth"] = "multiplier"
    unlimited = replace(circuit, parts=tuple(p for p in circuit.parts if p.model != DC_LIMIT))
    perfect = run(unlimited, **dict.fromkeys(limits.values(), False))
    rounding = max(_compare(circuit, reference, perfect, name, rows).largest for name in circuit.watched)
    causes = [Cause("rounding", rounding)]
    if len(circuit.parts) > _MANY_PARTS:
        together = _apart(circuit, reference, nominal, perfect)
        return tuple(sorted([*causes, Cause("op amps and multipliers together", together)], key=_by_size))
    slews = _steepest(circuit, nominal) >= _SLEW_SHARE * circuit.op_amp.slew
    unslewed = run(circuit, slew=False) if slews else nominal
    causes.append(Cause("slew", _apart(circuit, reference, nominal, unslewed)))
    # A fast op amp with a slow slew rate would chatter: bandwidth is taken away where slew is gone already.
    swift = run(circuit, bandwidth=False, slew=False)
    causes.append(Cause("bandwidth", _apart(circuit, reference, unslewed, swift)))
    for cause, flag in limits.items():
        if flag not in ("bandwidth", "slew"):
            causes.append(Cause(cause, _apart(circuit, reference, nominal, run(circuit, **{flag: False}))))
    if len(unlimited.parts) < len(circuit.parts):
        causes.append(Cause("DC-limit resistor", _apart(circuit, reference, nominal, run(unlimited))))
    causes.sort(key=_by_size)
    if "switch" in kinds:
        parts = tuple(replace(p, value=p.value * _SWITCH_OFF) if p.kind == "switch" else p for p in circuit.parts)
        off = _apart(circuit, reference, nominal, run(replace(circuit, parts=parts)))
        causes.append(Cause("switch resistance, if 10 % off", off))
    return tuple(causes)


def _by_size(cause: Cause) -> float:
    return -cause.error_percent


def _steepest(circuit: Circuit, traces: Traces) -> float:
    """Largest slope of an op amp's output [V/s]."""
    outputs = [traces.nets.index(p.nets[2]) for p in circuit.parts if p.kind == "op amp"]
    steps = np.diff(traces.times)
    moves = np.abs(np.diff(traces.volts[outputs], axis=1))[:, steps > 0.0]
    return float((moves / steps[steps > 0.0]).max(initial=0.0))


def _apart(circuit: Circuit, reference: Reference, one: Traces, other: Traces) -> float:
    """Largest distance of the watched signals of two runs [% of the base]."""
    rows = min(len(one.times), len(other.times))
    worst = 0.0
    for name, net in circuit.watched.items():
        base = error_base(circuit, reference, name)
        counts = settled(reference, name, base, _wait(circuit))[:rows]
        off = signal_of(circuit, one, net)[:rows] - signal_of(circuit, other, net)[:rows]
        worst = max(worst, 100.0 * float(np.abs(off[counts]).max(initial=0.0)) / base)
    return worst


def _warnings(
    traces: Traces,
    failed: str,
    nodes: tuple[NodePeak, ...],
    horizon: float | None,
    spreads: Mapping[str, Array],
    within: NDArray[np.bool_],
    accept: float,
    jumps: list[str],
) -> tuple[str, ...]:
    found = [*traces.warnings, *([failed] if failed else []), *(n.cause for n in nodes if not n.ok)]
    if horizon is not None:
        found.append(
            f"The sensitivity grows exponentially: errors and spread are compared up to {horizon:.4g} of problem time; "
            "beyond it only ranges and distributions mean anything."
        )
    found += jumps
    total = _total(spreads, within)
    signal, time = np.unravel_index(int(np.argmax(total)), total.shape)
    if 100.0 * total[signal, time] > accept:
        cause = max(spreads, key=lambda c: float(spreads[c][:, within][signal, time]))
        share = 100.0 * float(total[signal, time])
        found.append(
            f"Boards of this design will differ by {share:.{0 if share >= 10 else 1}f} % (one standard deviation"
            f"{', a linear estimate that is rough when so large' if share > _ROUGH else ''}), above the {accept:g} % "
            f"accepted, mostly by {cause}. {REMEDY[cause]}"
        )
    return tuple(found)
