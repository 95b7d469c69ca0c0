"""Nodes as sums: coefficients that count, and every node of a linear patch in terms of states and sources."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage

#: Place in a row -> weight: 0 is the constant 1, then states, then sources.
Row = dict[int, float]


def wire_gains(stage: Stage, patch: Patch, knobs: Mapping[str, float]) -> list[float]:
    """Coefficient of each wire that counts in the equation, the stage's knob included."""
    knob = 1.0
    if stage.knob is not None:
        knob = knobs[stage.knob] if stage.knob in knobs else float(patch.knobs[stage.knob].value)
    counted = stage.wires[:1] if stage.bipolar else stage.wires
    return [knob * float(w.coefficient) for w in counted]


def node_sums(patch: Patch, form: Form, names: Sequence[str], knobs: Mapping[str, float]) -> tuple[Any, Any]:
    """Every node of a linear patch, and every state's rate, as a sum of 1, the problem's states and its sources.

    Parameters
    ----------
    names
        States, then sources, in the order of the columns.
    knobs
        Values of the knobs.

    Returns
    -------
    nodes, rates
        Sparse, shapes ``(n_stages, 1 + n_names)`` and ``(n_names, 1 + n_names)``: signals in the Form's variables, and
        rates in rows of the states' places; rows of sources are empty.
    """
    place = {name: i + 1 for i, name in enumerate(names)}
    found: dict[str, Row] = {}
    for stage in patch.stages:
        if stage.kind in ("integrator", "source"):
            found[stage.node] = {place[stage.signal]: 1.0, 0: -float(form.offsets.get(stage.signal, 0))}
    for stage in patch.stages:
        if stage.kind == "reference":
            found[stage.node] = {0: 1.0}
        elif stage.kind == "inverter":
            found[stage.node] = found[stage.wires[0].source]
        elif stage.kind == "summer":
            found[stage.node] = _summed(stage, patch, knobs, found)
    rates: list[Row] = [{} for _ in names]
    for stage in patch.stages:
        if stage.kind == "integrator":
            rates[place[stage.signal] - 1] = _summed(stage, patch, knobs, found)
    width = len(names) + 1
    return _sparse([found[s.node] for s in patch.stages], width), _sparse(rates, width)


def _summed(stage: Stage, patch: Patch, knobs: Mapping[str, float], found: Mapping[str, Row]) -> Row:
    row: Row = {}
    for gain, wire in zip(wire_gains(stage, patch, knobs), stage.wires, strict=False):
        for column, weight in found[wire.source].items():
            row[column] = row.get(column, 0.0) + gain * weight
    return row


def _sparse(rows: Sequence[Row], width: int) -> Any:
    from scipy.sparse import csr_array

    columns = [c for row in rows for c in row]
    owners = [i for i, row in enumerate(rows) for _ in row]
    return csr_array(([v for row in rows for v in row.values()], (owners, columns)), shape=(len(rows), width))
