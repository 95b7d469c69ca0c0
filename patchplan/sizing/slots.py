"""The slots of a board that is made from parts on hand: every resistor and capacitor that it needs."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from patchplan.patch.records import Patch
from patchplan.sizing.model import Model, matrix_of
from patchplan.sizing.pieces import Shelf
from patchplan.sizing.records import Target
from patchplan.sizing.search import Effect, Loops, find_loops
from patchplan.sizing.stock import counts, matched_pair, without
from patchplan.sizing.values import START_FEEDBACK

Array = NDArray[np.float64]
Name: TypeAlias = tuple[str, int | str]
#: Slots that only need some value take one near this [ohm].
EASY = {"hold": 2e4, "ready": 1e4, "Rf": 2e4, "S2": START_FEEDBACK}


@dataclass(frozen=True)
class Slots:
    """Slots, pieces and what errors do, as all attempts of a search share them.

    Attributes
    ----------
    names, capacitive
        The slots, and whether each holds a capacitor.
    incidence
        Shape ``(n_rows, n_slots)``; zero columns for slots that only need some value.
    shelf
        The values on hand and their counts, less the pairs.
    pairs
        Stage -> the resistors of an inverter on the reference; "" is one that a step may need yet.
    paired
        Whether two resistors may stand for one in a leg.
    """

    model: Model
    target: Target
    names: tuple[Name, ...]
    capacitive: NDArray[np.bool_]
    incidence: Array
    matrix: Array
    constant: Array
    effect: Effect
    loops: Loops
    comfortable: Mapping[str, float]
    shelf: Shelf
    pairs: Mapping[str, tuple[float, float]]
    paired: bool = False


def find_slots(model: Model, patch: Patch, target: Target, effect: Effect, comfortable: Mapping[str, float]) -> Slots:
    """Slots of every wire, capacitor, feedback resistor and start network, and the pieces for them."""
    names: dict[Name, int] = {}
    entries: list[tuple[int, int, float]] = []

    def slot(stage: str, what: int | str) -> int:
        return names.setdefault((stage, what), len(names))

    for row, ratio in enumerate(model.ratios):
        if ratio.kind == "start":
            entries += [(row, slot(ratio.stage, "S2"), 1.0), (row, slot(ratio.stage, "S1"), -1.0)]
            continue
        entries.append((row, slot(ratio.stage, ratio.wire), 1.0))
        if ratio.kind == "integrator":
            entries.append((row, slot(ratio.stage, "C"), 1.0))
        elif ratio.stage not in model.feedback:
            entries.append((row, slot(ratio.stage, "Rf"), -1.0))
    for stage in patch.stages:
        if stage.kind == "integrator":
            slot(stage.name, "C")
            if target.switch_on and not stage.start:
                slot(stage.name, "hold")
        elif stage.kind == "summer" and not stage.knob:
            slot(stage.name, "Rf")
        elif stage.bipolar:
            slot(stage.name, 0), slot(stage.name, "Rf")
    incidence = np.zeros((len(model.ratios), len(names)))
    for row, column, sign in entries:
        incidence[row, column] = sign
    matrix, constant = matrix_of(model)
    pairs = _reference_pairs(patch, target)
    rest = without(target, Counter(r for pair in pairs.values() for r in pair))
    have = [counts(rest.resistors, rest.resistor_piles), counts(rest.capacitors, rest.capacitor_piles)]
    return Slots(
        model, target, tuple(names), np.array([what == "C" for _, what in names], dtype=bool), incidence, matrix,
        constant, effect, find_loops(matrix, effect), comfortable,
        Shelf(
            np.array([*have[0], *have[1]]), np.array([*have[0].values(), *have[1].values()]),
            np.repeat([False, True], [len(have[0]), len(have[1])]),
        ),
        pairs,
    )  # fmt: skip


def _reference_pairs(patch: Patch, target: Target) -> dict[str, tuple[float, float]]:
    """Resistors as equal as can be for every inverter on the reference, whose scale is not free."""
    if target.resistor_piles is None:
        return {}
    stages = [s.name for s in patch.stages if s.kind == "inverter" and s.signal == "1"]
    if not stages and any(s.kind == "source" and not patch.sources[s.signal].external for s in patch.stages):
        stages = [""]
    found: dict[str, tuple[float, float]] = {}
    for stage in stages:
        pair = matched_pair(without(target, Counter(r for p in found.values() for r in p)), EASY["ready"])
        if pair is not None:
            found[stage] = pair
    return found
