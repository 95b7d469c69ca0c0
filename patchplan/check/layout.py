"""The parts of a board sorted by what they do in the nodal model."""

from __future__ import annotations

from collections.abc import Container, Iterable, Iterator
from dataclasses import dataclass, replace
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from patchplan.circuit.records import GROUND, Circuit, Part

Array = NDArray[np.float64]
#: A dense array of a small board, a sparse matrix of a large one.
Matrix: TypeAlias = Any

#: Leak that holds a floating net [S], and the least resistance of a switch or a potentiometer's end [ohm].
_LEAK, _LEAST_OHM = 1e-9, 1e-3
#: Series resistance of a capacitor that closes a loop of capacitors [ohm].
_SERIES_OHM = 1.0


@dataclass(frozen=True)
class Layout:
    """The parts sorted by what they do; ``driven_rows`` gives driven nets over states and inputs."""

    free: dict[str, int]
    nets: tuple[str, ...]
    driven: dict[str, int]
    driven_rows: Matrix
    resistors: tuple[tuple[str, str, float], ...]
    capacitors: tuple[Part, ...]
    op_amps: tuple[Part, ...]
    multipliers: tuple[Part, ...]
    sources: tuple[Part, ...]
    drawn: dict[str, float]
    n_states: int
    n_columns: int
    warnings: tuple[str, ...]


def layout_of(circuit: Circuit, mode: str, high: Container[str] = ()) -> Layout:
    """Sort the parts, number the nets, hold what floats.

    Parameters
    ----------
    mode
        ``operate`` or ``hold``.
    high
        Sources whose control lines are high.
    """
    of_kind = {
        k: tuple(p for p in circuit.parts if p.kind == k) for k in ("op amp", "multiplier", "source", "reference")
    }
    op_amps, multipliers, sources = of_kind["op amp"], of_kind["multiplier"], of_kind["source"]
    drivers = [*op_amps, *multipliers, *sources, *of_kind["reference"]]
    driven = {GROUND: 0}
    warnings = []
    for part in drivers:
        net = part.nets[-1]
        if net in driven:
            warnings.append(f"{part.ref} drives net {net}, which is driven already; its output is left out.")
        driven.setdefault(net, len(driven))
    resistors = list(_resistors(circuit.parts, mode, high))
    capacitors, loops = _tree_capacitors(circuit.parts, driven)
    for part in loops:
        inner = f"{part.ref} inside"
        capacitors.append(replace(part, nets=(inner, part.nets[1])))
        resistors.append((part.nets[0], inner, _SERIES_OHM))
    touched = [n for p in (*circuit.parts, *capacitors) if p.kind != "decoupling" for n in p.nets]
    free = {net: i for i, net in enumerate(n for n in dict.fromkeys([*touched, *circuit.nodes]) if n not in driven)}
    floating = _floating(free, driven, resistors, capacitors)
    warnings += [f"Net {net} is connected to no output, source or ground." for net in floating]
    resistors += [(net, GROUND, 1.0 / _LEAK) for net in floating]
    drawn: dict[str, float] = {}
    for part, current in [(p, circuit.op_amp.bias) for p in op_amps] + [
        (p, circuit.multiplier.bias) for p in multipliers
    ]:
        for net in part.nets[:-1]:
            drawn[net] = drawn.get(net, 0.0) + current
    n_states = len(capacitors) + len(op_amps) + len(multipliers)
    n_columns = n_states + len(sources) + 1
    rows = _driven_rows(circuit, driven, drivers, len(capacitors), n_states, n_columns)
    return Layout(
        free=free,
        nets=(*free, *driven),
        driven=driven,
        driven_rows=rows,
        resistors=tuple(resistors),
        capacitors=tuple(capacitors),
        op_amps=op_amps,
        multipliers=multipliers,
        sources=sources,
        drawn=drawn,
        n_states=n_states,
        n_columns=n_columns,
        warnings=tuple(warnings),
    )


def _resistors(parts: Iterable[Part], mode: str, high: Container[str]) -> Iterator[tuple[str, str, float]]:
    for part in parts:
        line = ("high" if part.control in high else "low") if part.control else mode
        if part.kind == "resistor" or (part.kind == "switch" and part.closed == line):
            yield part.nets[0], part.nets[1], max(part.value, _LEAST_OHM)
        elif part.kind == "potentiometer":
            end_a, wiper, end_b = part.nets
            yield end_a, wiper, max(part.value * part.total, _LEAST_OHM)
            yield wiper, end_b, max((1.0 - part.value) * part.total, _LEAST_OHM)


def _tree_capacitors(parts: Iterable[Part], driven: Iterable[str]) -> tuple[list[Part], list[Part]]:
    """Capacitors whose voltages are independent, and those that close a loop; both ends driven: neither."""
    ends_driven = set(driven)
    group: dict[str, str] = dict.fromkeys(driven, GROUND)

    def find(net: str) -> str:
        while group.setdefault(net, net) != net:
            net = group[net]
        return net

    tree, loops = [], []
    for part in parts:
        if part.kind != "capacitor" or ends_driven.issuperset(part.nets):
            continue
        first, second = find(part.nets[0]), find(part.nets[1])
        if first == second:
            loops.append(part)
            continue
        tree.append(part)
        low, high = (second, first) if second == GROUND else (first, second)
        group[high] = low
    return tree, loops


def _floating(
    free: dict[str, int],
    driven: dict[str, int],
    resistors: Iterable[tuple[str, str, float]],
    capacitors: Iterable[Part],
) -> list[str]:
    """One net of every group of free nets that no driven net holds."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    place = {**dict.fromkeys(driven, 0), **{net: i + 1 for net, i in free.items()}}
    pairs = [(a, b) for a, b, _ in resistors] + [(p.nets[0], p.nets[1]) for p in capacitors]
    first, second = [place[a] for a, _ in pairs], [place[b] for _, b in pairs]
    size = len(free) + 1
    graph = coo_array((np.ones(len(pairs)), (first, second)), shape=(size, size))
    _, labels = connected_components(graph, directed=False)
    seen = {labels[0]}
    found = []
    for net in free:
        label = labels[place[net]]
        if label not in seen:
            seen.add(label)
            found.append(net)
    return found


def _driven_rows(
    circuit: Circuit, driven: dict[str, int], drivers: list[Part], n_capacitors: int, n_states: int, n_columns: int
) -> Matrix:
    """Voltages of the driven nets over states and inputs, sparse, shape ``(n_driven, n_columns)``."""
    from scipy.sparse import dok_array

    rows = dok_array((len(driven), n_columns))
    taken = {GROUND}
    state, source = n_capacitors, n_states
    for part in drivers:
        net = part.nets[-1]
        column = n_columns - 1
        if part.kind in ("op amp", "multiplier"):
            column, state = state, state + 1
        elif part.kind == "source":
            column, source = source, source + 1
        if net in taken:
            continue
        taken.add(net)
        rows[driven[net], column] = part.value if part.kind == "reference" else 1.0
        if part.kind == "source" and net in circuit.nodes:
            rows[driven[net], n_columns - 1] = circuit.nodes[net].offset_volts
    return rows.tocsr()
