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


def node_sums(patch: Patch, form: Form, names: Sequence[str], rows: Any, knobs: Mapping[str, float]) -> Any:
    """Every node of a linear patch as a sum of 1, the problem's states and its sources, in the Form's variables.

    Parameters
    ----------
    names, rows
        Signals of the problem, and each as such a sum: sparse, shape ``(n_names, n_columns)``.
    knobs
        Values of the knobs.

    Returns
    -------
    sparse array
        Shape ``(n_stages, n_columns)``.
    """
    place = {name: i for i, name in enumerate(names)}
    known = rows.tocsr()
    found: dict[str, Row] = {}
    for stage in patch.stages:
        if stage.kind in ("integrator", "source"):
            part = slice(*known.indptr[place[stage.signal] :][:2])
            row = dict(zip(known.indices[part].tolist(), known.data[part].tolist(), strict=True))
            row[0] = row.get(0, 0.0) - float(form.offsets.get(stage.signal, 0))
            found[stage.node] = row
    for stage in patch.stages:
        if stage.kind == "reference":
            found[stage.node] = {0: 1.0}
        elif stage.kind == "inverter":
            found[stage.node] = found[stage.wires[0].source]
        elif stage.kind == "summer":
            found[stage.node] = _summed(stage, patch, knobs, found)
    return _sparse([found[s.node] for s in patch.stages], rows.shape[1])


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
