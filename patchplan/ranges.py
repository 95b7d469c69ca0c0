"""Ranges of every node of the patch, from the runs and bounds that Reach found."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage
from patchplan.patch.sums import node_sums, wire_gains
from patchplan.reach.bounds import ends_of
from patchplan.reach.curves import extremes
from patchplan.reach.records import Bounded, Range, Reach, Run

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NodeRange:
    """Range of the signal at one node (without the node's sign), problem units of the Form's shifted variable.

    Attributes
    ----------
    rate
        Largest magnitude of the signal's time derivative [1/problem time], inf where a source jumps.
    """

    node: str
    low: float
    high: float
    rate: float
    known_by: str

    @property
    def peak(self) -> float:
        """Largest magnitude."""
        return max(abs(self.low), abs(self.high))


@dataclass(frozen=True)
class Ranges:
    """All nodes' ranges, and their signals over the nominal run.

    Attributes
    ----------
    nodes
        By node.
    times
        Shape ``(n_times,)`` [problem time], the Reference's.
    values, rates
        Node -> shape ``(n_times,)``: the Form's signal (without the node's sign) and its time derivative.
    """

    nodes: Mapping[str, NodeRange]
    times: Array
    values: Mapping[str, Array]
    rates: Mapping[str, Array]


Table = dict[str, tuple[Array, Array]]

#: From the weakest knowledge to the strongest.
_STRENGTH = ("simulated", "stated", "proved")


def find_ranges(patch: Patch, form: Form, reach: Reach) -> Ranges:
    """Range of every node of the patch, and its signal over the nominal run.

    The patch is evaluated on every run with that run's knobs, stage by stage. Nodes whose signal Reach knows take its
    range; others widen what the runs show by what their inputs' ranges hold beyond the runs. Where an input is known
    only by bounds, every node of a linear patch has a peak gain of its own, and others take the interval of all
    combinations of their inputs' ranges.
    """
    nominal = evaluate(patch, form, reach.reference.names, reach.runs[0])
    values = {node: pair[0] for node, pair in nominal.items()}
    rates = {node: pair[1] for node, pair in nominal.items()}
    if reach.bounded:
        return Ranges(_bounded(patch, form, reach), reach.reference.times, values, rates)
    seen = _Seen(patch, form, reach)
    bounded = any(s.within is not None and s.waveform is None for s in patch.sources.values())
    nodes: dict[str, NodeRange] = {}
    for stage in patch.stages:
        nodes[stage.node] = _node(stage, patch, form, reach, nodes, seen, bounded)
    # A state's rate needs the ranges of all its inputs; rates of sums and products then need the states' rates.
    for stage in patch.stages:
        if stage.kind in ("integrator", "source"):
            nodes[stage.node] = _with_rate(stage, patch, nodes, seen, bounded)
    for stage in patch.stages:
        if stage.kind not in ("integrator", "source"):
            nodes[stage.node] = _node(stage, patch, form, reach, nodes, seen, bounded)
    return Ranges(nodes, reach.reference.times, values, rates)


def evaluate(patch: Patch, form: Form, names: tuple[str, ...], run: Run) -> Table:
    """Signal and rate of every node (without its sign) over one run, in the Form's variables.

    Parameters
    ----------
    names
        Names of the rows of ``run.values``.
    """
    place = {name: i for i, name in enumerate(names)}
    table: Table = {}
    flat = np.zeros_like(run.times)
    for stage in patch.stages:
        if stage.kind in ("integrator", "source"):
            row, offset = place[stage.signal], float(form.offsets.get(stage.signal, 0))
            table[stage.node] = run.values[row] - offset, run.rates[row]
    for stage in patch.stages:
        if stage.kind == "reference":
            table[stage.node] = flat + 1.0, flat
        elif stage.kind == "multiplier":
            (a, da), (b, db) = (table[w.source] for w in stage.wires)
            table[stage.node] = a * b, a * db + da * b
        elif stage.kind == "inverter":
            table[stage.node] = table[stage.wires[0].source]
        elif stage.kind == "summer":
            gains = wire_gains(stage, patch, run.knobs)
            pairs = [(g, table[w.source]) for g, w in zip(gains, stage.wires, strict=False)]
            value = sum((g * pair[0] for g, pair in pairs), flat)
            table[stage.node] = value, sum((g * pair[1] for g, pair in pairs), flat)
    return table


def _bounded(patch: Patch, form: Form, reach: Reach) -> dict[str, NodeRange]:
    """Each node of a linear patch by its own peak gain, at every setting that Reach looked at."""
    lows, highs, rates, proved = [], [], [], True
    for case in reach.bounded:
        sums = node_sums(patch, form, case.names, case.rows, case.middle.knobs)
        by_state = sums[:, 1 : 1 + case.slopes.shape[0]]
        ends, moving = ends_of(case, sums), ends_of(case, by_state @ case.slopes)
        lows.append(ends.low)
        highs.append(ends.high)
        rates.append(np.maximum(-moving.low, moving.high) + _steepest_inputs(case, sums))
        proved &= ends.proved
    low, high, fastest = np.min(lows, axis=0), np.max(highs, axis=0), np.max(rates, axis=0)
    known_by = "proved" if proved and len(reach.bounded) == 1 else "simulated"
    nodes = {}
    for i, stage in enumerate(patch.stages):
        found = _known(stage, form, reach)
        if found is None or stage.kind == "reference":
            found = Range(
                stage.signal, float(low[i]), float(high[i]), "proved" if stage.kind == "reference" else known_by
            )
        nodes[stage.node] = NodeRange(stage.node, found.low, found.high, float(fastest[i]), found.known_by)
    return nodes


def _steepest_inputs(case: Bounded, sums: Any) -> Array:
    """Largest slope that the sources alone give each node, shape ``(n_nodes,)``; inf where one may jump."""
    first = len(case.responses[0].missed)
    run, count = case.middle, case.slopes.shape[1] - 1
    steepest = np.abs(run.rates[first:count]).max(axis=1)
    jumps = np.flatnonzero(np.diff(run.times) == 0)
    moves = np.abs(np.diff(run.values[first:count], axis=1)[:, jumps]).max(axis=1, initial=0.0)
    steepest[moves > 1e-9 * np.abs(run.values[first:count]).max(axis=1)] = np.inf
    steepest[[r.place for r in case.responses]] = np.inf
    fed = abs(sums[:, 1 + first :]).toarray()
    return np.asarray(np.where(fed > 0, fed * np.where(fed > 0, steepest, 0.0), 0.0).sum(axis=1))


class _Seen:
    """What the runs show: extremes and fastest rate of each node."""

    def __init__(self, patch: Patch, form: Form, reach: Reach) -> None:
        self.low: dict[str, float] = {}
        self.high: dict[str, float] = {}
        self.rate: dict[str, float] = {}
        self.fed = _fed_back(patch)
        nodes = [s.node for s in patch.stages]
        ends = []
        for run in reach.runs:
            table = evaluate(patch, form, reach.reference.names, run)
            values = np.array([table[n][0] for n in nodes])
            rates = np.array([table[n][1] for n in nodes])
            fastest = np.abs(rates).max(axis=1)
            jumps = np.flatnonzero(np.diff(run.times) == 0)
            if jumps.size:
                size = np.abs(values[:, jumps + 1] - values[:, jumps]).max(axis=1)
                peak = np.abs(values).max(axis=1)
                fastest[size > 1e-9 * peak] = np.inf
            ends.append((*extremes(run.times, values, rates), fastest))
        for i, node in enumerate(nodes):
            self.low[node] = float(min(e[0][i] for e in ends))
            self.high[node] = float(max(e[1][i] for e in ends))
            self.rate[node] = float(max(e[2][i] for e in ends))

    def beyond(self, node: NodeRange) -> tuple[float, float]:
        """How far a node's range goes below and above its runs."""
        return max(0.0, self.low[node.node] - node.low), max(0.0, node.high - self.high[node.node])

    def growth(self, node: NodeRange) -> float:
        """Peak of the range over peak of the runs, at least 1."""
        peak = max(abs(self.low[node.node]), abs(self.high[node.node]))
        return max(1.0, node.peak / peak) if peak else 1.0


def _fed_back(patch: Patch) -> set[str]:
    """Nodes from which some integrator follows."""
    wires = {s.node: [w.source for w in s.wires] for s in patch.stages}
    left = [source for s in patch.stages if s.kind == "integrator" for source in wires[s.node]]
    found: set[str] = set()
    while left:
        node = left.pop()
        if node not in found:
            found.add(node)
            left += wires[node]
    return found


def _known(stage: Stage, form: Form, reach: Reach) -> Range | None:
    """Range that Reach found for the stage's signal, in the Form's variable."""
    found = reach.ranges.get(stage.signal)
    if found is None or stage.kind not in ("integrator", "source", "summer", "inverter"):
        return None
    offset = float(form.offsets.get(stage.signal, 0))
    return Range(found.name, found.low - offset, found.high - offset, found.known_by)


def _node(
    stage: Stage, patch: Patch, form: Form, reach: Reach, nodes: Mapping[str, NodeRange], seen: _Seen, bounded: bool
) -> NodeRange:
    if stage.kind == "reference":
        return NodeRange(stage.node, 1.0, 1.0, 0.0, "proved")
    known = _known(stage, form, reach)
    if known is None or stage.kind not in ("integrator", "source"):
        derived = (_combined if bounded else _widened)(stage, patch, nodes, seen)
        if known is None:
            return derived
        return NodeRange(stage.node, known.low, known.high, derived.rate, known.known_by)
    return NodeRange(stage.node, known.low, known.high, seen.rate[stage.node], known.known_by)


def _weakest(kinds: list[str]) -> str:
    return min(kinds, key=_STRENGTH.index, default="proved")


def _widened(stage: Stage, patch: Patch, nodes: Mapping[str, NodeRange], seen: _Seen) -> NodeRange:
    """What the runs show, plus what the inputs' ranges hold beyond their runs."""
    low, high, rate = seen.low[stage.node], seen.high[stage.node], seen.rate[stage.node]
    inputs = [nodes[w.source] for w in stage.wires]
    known_by = _weakest([n.known_by for n in inputs])
    if stage.kind == "inverter":
        return NodeRange(stage.node, inputs[0].low, inputs[0].high, inputs[0].rate, known_by)
    counted = inputs[:1] if stage.bipolar else inputs
    if stage.knob is not None and len(counted) == 1 and stage.node not in seen.fed:
        # What the knob makes has no way back to the signal, so that both can be at their largest together.
        return _combined(stage, patch, nodes, seen)
    if stage.kind == "multiplier" or (stage.knob is not None and len(counted) == 1):
        # By shares: a knob is seldom at its largest where its signal is.
        growth = float(np.prod([seen.growth(n) for n in counted]))
        low, high = low * growth if low < 0 else low / growth, high * growth if high > 0 else high / growth
        return NodeRange(stage.node, low, high, rate * growth, known_by)
    more = 1.0
    for interval, node in zip(_gain_intervals(stage, patch), inputs, strict=False):
        below, above = seen.beyond(node)
        low -= max(g * below if g > 0 else -g * above for g in interval)
        high += max(g * above if g > 0 else -g * below for g in interval)
        more = max(more, seen.growth(node))
    return NodeRange(stage.node, low, high, rate * more, known_by)


def _combined(stage: Stage, patch: Patch, nodes: Mapping[str, NodeRange], seen: _Seen) -> NodeRange:
    """Interval arithmetic over the inputs' ranges: holds for every waveform within the bounds."""
    inputs = [nodes[w.source] for w in stage.wires]
    known_by = _weakest([n.known_by for n in inputs])
    if stage.kind == "inverter":
        return NodeRange(stage.node, inputs[0].low, inputs[0].high, inputs[0].rate, known_by)
    if stage.kind == "multiplier":
        a, b = inputs
        corners = [x * y for x in (a.low, a.high) for y in (b.low, b.high)]
        low = min(corners)
        if a.node == b.node:
            low = 0.0 if a.low < 0 < a.high else min(a.low**2, a.high**2)
        return NodeRange(stage.node, low, max(corners), _times(a.peak, b.rate) + _times(b.peak, a.rate), known_by)
    low = high = rate = 0.0
    for interval, node in zip(_gain_intervals(stage, patch), inputs, strict=False):
        corners = [g * x for g in interval for x in (node.low, node.high)]
        low, high = low + min(corners), high + max(corners)
        rate += _times(max(abs(g) for g in interval), node.rate)
    return NodeRange(stage.node, low, high, rate, known_by)


def _times(size: float, rate: float) -> float:
    """Product in which 0 wins over infinity."""
    return size * rate if size else 0.0


def _gain_intervals(stage: Stage, patch: Patch) -> list[tuple[float, float]]:
    """Range of each counted wire's coefficient over the range of the stage's knob."""
    if stage.knob is None:
        return [(g, g) for g in wire_gains(stage, patch, {})]
    knob = patch.knobs[stage.knob]
    ends = [wire_gains(stage, patch, {knob.name: float(k)}) for k in (knob.low, knob.high)]
    return list(zip(*ends, strict=True))


def _with_rate(stage: Stage, patch: Patch, nodes: Mapping[str, NodeRange], seen: _Seen, bounded: bool) -> NodeRange:
    """The node's range with a rate that holds over the inputs' ranges as well."""
    node = nodes[stage.node]
    if stage.kind == "source":
        free = patch.sources[stage.signal].waveform is None
        return NodeRange(node.node, node.low, node.high, np.inf if free else node.rate, node.known_by)
    inputs = [nodes[w.source] for w in stage.wires]
    gains = wire_gains(stage, patch, {})
    if bounded:
        ends = [sorted((g * n.low, g * n.high)) for g, n in zip(gains, inputs, strict=True)]
        rate = max(abs(sum(e[0] for e in ends)), abs(sum(e[1] for e in ends)))
    else:
        rate = node.rate + sum(abs(g) * max(seen.beyond(n)) for g, n in zip(gains, inputs, strict=True))
    return NodeRange(node.node, node.low, node.high, rate, node.known_by)
