"""Nonlinear equations under bounded inputs over a box of parameters: waveforms are searched at its worst settings."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.reach.box import knobs_of, search_boxes
from patchplan.reach.field import Field, field_of
from patchplan.reach.free import search_waveforms, targets_of
from patchplan.reach.inputs import Inputs, Stored
from patchplan.reach.records import Box
from patchplan.reach.search import KEPT, Excursion, coarse_grid
from patchplan.reach.solve import GrowsWithoutBoundError

Array = NDArray[np.float64]
Waveforms = Mapping[str, Stored]

#: Settings of the box at which waveforms are searched anew, and waveforms that are run over it.
MOST_SETTINGS, MOST_WAVEFORMS = 3, 6


def search_free_box(
    system: System, numeric: Field, uncertain: System | None, known: Sequence[Waveforms], times: Array, peaks: Array
) -> Excursion:
    """Run the waveforms found at nominal values over the box, search anew where it is worst, run what that finds.

    Parameters
    ----------
    known
        Waveforms found at nominal values, that of the first watched signal first.

    Raises
    ------
    GrowsWithoutBoundError
        A setting of the adjustable parameters makes the solution grow without bound.
    """

    def over_box(waveforms: Waveforms) -> Excursion:
        inputs = Inputs(system, waveforms)
        return search_boxes(system, numeric, uncertain, inputs, coarse_grid(system, numeric, inputs, times), peaks)

    waveforms = _distinct(known)
    found = over_box(waveforms[0])
    for waveform in waveforms[1:]:
        found = _wider(found, over_box(waveform))
    if found.box is None:
        return found
    # Where tolerances make the solution grow without bound, only the adjustable parameters were moved.
    wide = system if uncertain is None or found.warnings else uncertain
    field = numeric if wide is system else field_of(wide)
    more = list(waveforms)
    for point in _worst_settings(found.box, [numeric.names[i] for i in targets_of(system, numeric)]):
        weights = field.weights(knobs_of(wide, point))
        try:
            searched = search_waveforms(wide, field, weights, peaks)
        except GrowsWithoutBoundError as error:
            raise GrowsWithoutBoundError(error.time, point) from None
        found = _with_ends(found, numeric.names, field.names, searched.low, searched.high)
        more += searched.stand_ins
    for waveform in _distinct(more)[len(waveforms) : MOST_WAVEFORMS]:
        found = _wider(found, over_box(waveform))
    return found


def _distinct(waveforms: Sequence[Waveforms]) -> list[Waveforms]:
    keyed = {b"".join(part.tobytes() for pair in w.values() for part in pair): w for w in waveforms}
    return list(keyed.values())


def _worst_settings(box: Box, first: Sequence[str]) -> list[Mapping[str, float]]:
    """Settings at which names go furthest, those of ``first`` before the others, each once."""
    ordered = sorted(box.worst, key=lambda point: first.index(point.name) if point.name in first else len(first))
    settings = {tuple(point.parameters.values()): point.parameters for point in ordered}
    return list(settings.values())[:MOST_SETTINGS]


def _with_ends(found: Excursion, mine: Sequence[str], theirs: Sequence[str], low: Array, high: Array) -> Excursion:
    """Widened by ends given by name."""
    place = {name: i for i, name in enumerate(theirs)}
    lows, highs = found.low.copy(), found.high.copy()
    for i, name in enumerate(mine):
        if name in place:
            lows[i], highs[i] = min(lows[i], low[place[name]]), max(highs[i], high[place[name]])
    return replace(found, low=lows, high=highs)


def _wider(one: Excursion, other: Excursion) -> Excursion:
    """Both together: the widest ends, the worst points, the counts."""
    if one.box is None or other.box is None:
        return replace(one, warnings=tuple(dict.fromkeys((*one.warnings, *other.warnings))))
    known = {point.name: point for point in other.box.worst}
    pairs = [(point, known.get(point.name, point)) for point in one.box.worst]
    box = replace(
        one.box, climbed=one.box.climbed + other.box.climbed, waveforms=one.box.waveforms + 1,
        worst=tuple(max(pair, key=lambda point: abs(point.value)) for pair in pairs),
    )  # fmt: skip
    return Excursion(
        np.minimum(one.low, other.low), np.maximum(one.high, other.high), (*one.runs, *other.runs[:KEPT]),
        tuple(dict.fromkeys((*one.warnings, *other.warnings))), box,
    )  # fmt: skip
