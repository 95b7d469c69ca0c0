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
    """Every node of a linear patch, and its slope, as a sum of 1, the problem's states and its sources.

    Parameters
    ----------
    names
        The problem's states, then its sources, in the order of the columns.
    knobs
        Values of the knobs.

    Returns
    -------
    nodes, slopes
        Sparse, shape ``(n_stages, 1 + n_names)``, in the Form's variables; slopes without what the sources' own slopes
        add.
    """
    place = {name: i + 1 for i, name in enumerate(names)}
    own = {s.signal: len(names) + 1 + i for i, s in enumerate(patch.stages) if s.signal in form.sums}
    place |= own
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
    width = 1 + len(names) + len(patch.stages)
    rates: list[Row] = [{} for _ in range(width)]
    for stage in patch.stages:
        if stage.kind == "integrator":
            rates[place[stage.signal]] = _summed(stage, patch, knobs, found)
    # States of the board's own stand in columns behind the problem's, and are put in at the end.
    told: list[Row] = [{i: 1.0} if i <= len(names) else {} for i in range(width)]
    for name, column in own.items():
        told[column] = {place[old]: float(weight) for old, weight in form.sums[name].items()}
    nodes, known = _sparse([found[s.node] for s in patch.stages], width), _sparse(told, 1 + len(names))
    return nodes @ known, nodes @ _sparse(rates, width) @ known


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
