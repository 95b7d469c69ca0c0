"""Parts on hand: what a sizing takes of them and what is left."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import replace

from patchplan.patch.records import Patch
from patchplan.sizing.records import Pile, Sizing, StageSizing, Target

#: Pieces counted where any number can be had.
PLENTY = 10**6


def counts(values: Iterable[float], piles: tuple[Pile, ...] | None) -> dict[float, int]:
    """Value -> pieces on hand; :data:`PLENTY` where parts are not counted."""
    if piles is None:
        return dict.fromkeys(values, PLENTY)
    found: Counter[float] = Counter()
    for pile in piles:
        found[pile.value] += pile.count
    return {value: found[value] for value in values}


def taken(patch: Patch, stages: Mapping[str, StageSizing]) -> tuple[Counter[float], Counter[float]]:
    """Value -> pieces that a board takes: resistors [ohm] and capacitors [F].

    A rheostat stands for the feedback resistor of a knob's stage.
    """
    resistors: Counter[float] = Counter()
    capacitors: Counter[float] = Counter()
    for stage in patch.stages:
        sized = stages.get(stage.name, StageSizing(stage.name))
        resistors.update(r for leg in sized.legs for r in leg.resistors)
        resistors.update(r for r in sized.start or () if r)
        if sized.feedback and not (stage.knob and not stage.bipolar):
            resistors[sized.feedback] += 1
        if sized.capacitor:
            capacitors[sized.capacitor] += 1
    return resistors, capacitors


def without(target: Target, resistors: Counter[float], capacitors: Counter[float] | None = None) -> Target:
    """The target with what is left after some pieces are taken; as it was where parts are not counted."""
    ohms, ohm_piles = _left(target.resistors, target.resistor_piles, resistors)
    farads, farad_piles = _left(target.capacitors, target.capacitor_piles, capacitors or Counter())
    return replace(target, resistors=ohms, resistor_piles=ohm_piles, capacitors=farads, capacitor_piles=farad_piles)


def left_over(patch: Patch, sizing: Sizing, target: Target) -> Target:
    """The target with what a sizing leaves on the shelf."""
    return without(target, *taken(patch, sizing.stages))


def _left(
    values: tuple[float, ...], piles: tuple[Pile, ...] | None, used: Counter[float]
) -> tuple[tuple[float, ...], tuple[Pile, ...] | None]:
    if piles is None:
        return values, None
    left, rest = [], Counter(used)
    for pile in piles:
        gone = min(pile.count, rest[pile.value])
        rest[pile.value] -= gone
        if pile.count > gone:
            left.append(replace(pile, count=pile.count - gone))
    have = {pile.value for pile in left}
    return tuple(v for v in values if v in have), tuple(left)


def matched_pair(target: Target, wanted: float) -> tuple[float, float] | None:
    """Two resistors as equal as can be, the larger first, near a wanted value [ohm]; None where fewer are left."""
    have = counts(target.resistors, target.resistor_piles)
    pairs = [(v, v) for v, count in have.items() if count > 1]
    pairs += zip(target.resistors, target.resistors[1:], strict=False)
    # A factor of four away from the wanted value costs as much as 0.01 % of mismatch.
    best = min(pairs, key=lambda p: 1e4 * (p[1] / p[0] - 1) + abs(p[0] / wanted - wanted / p[0]) / 4, default=None)
    return best and (best[1], best[0])


def tolerance_of(value: float, piles: tuple[Pile, ...] | None, usual: float) -> float:
    """Tolerance of a part of this value: that of the worst pile, where parts are counted."""
    return max((p.tolerance for p in piles or () if p.value == value), default=usual)
