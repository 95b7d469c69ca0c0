"""What a stock lacks: the fewest more parts found with which the board can be built."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import TypeAlias

import numpy as np

from patchplan.quantity import engineering
from patchplan.sizing.records import Pile, Target
from patchplan.sizing.stock import PLENTY
from patchplan.sizing.values import Values

#: A row further off than this was not in reach of the stock, see :data:`patchplan.sizing.faults.OUT_OF_REACH`.
FAR = 0.1
#: Searches in which parts are taken off the list of what is lacking.
MOST_TRIALS = 16
#: Kind of part -> marked value [ohm], [F] -> pieces.
Parts: TypeAlias = Mapping[str, Counter[float]]
Search: TypeAlias = Callable[[Target], Values | None]
_UNITS = {"resistor": "Ω", "capacitor": "F"}


def in_reach(values: Values | None) -> bool:
    """Whether every row is as near as :data:`FAR`."""
    return values is not None and bool(np.abs(values.errors).max(initial=0.0) <= FAR)


def find_shortage(search: Search, target: Target) -> tuple[tuple[str, ...], Values | None]:
    """Sentences on the parts that a stock lacks, the kind that lacks most first, and values that hold with them.

    More of one kind is tried before more of both. No measured part is asked for twice, only others that are marked
    alike.

    Returns
    -------
    tuple
        No sentences and None where more parts of the marked values would not help.
    """
    counted = [kind for kind in _UNITS if _piles(target, kind) is not None]
    ways = [way for kind in counted if (way := _least(search, target, (kind,)))]
    if not ways and len(counted) > 1:
        ways = [way for way in [_least(search, target, tuple(counted))] if way]
    if not ways:
        return (), None
    lacking, values = min(ways, key=lambda way: sum(map(Counter.total, way[0].values())))
    order = sorted(lacking, key=lambda kind: -lacking[kind].total())
    return tuple(_sentence(kind, lacking[kind], target) for kind in order if lacking[kind]), values


def _least(search: Search, target: Target, kinds: tuple[str, ...]) -> tuple[Parts, Values] | None:
    """What lacks if only these kinds may be added to, as little as trials find, and values with it."""
    plenty = {kind: Counter({p.marked: PLENTY for p in _piles(target, kind) or ()}) for kind in kinds}
    values = search(with_more(target, plenty))
    if values is None or not in_reach(values):
        return None
    lacking = {kind: _beyond(values, target, kind) for kind in kinds}
    trials = MOST_TRIALS
    for kind, value in [(k, v) for k in kinds for v, _ in lacking[k].most_common()]:
        while lacking[kind][value] and trials:
            trials -= 1
            fewer = {**lacking, kind: lacking[kind] - Counter([value])}
            found = search(with_more(target, fewer))
            if found is None or not in_reach(found):
                break
            lacking, values = fewer, found
    return lacking, values


def _beyond(values: Values, target: Target, kind: str) -> Counter[float]:
    """What a board takes of one kind beyond the stock."""
    needed: Counter[float] = Counter()
    for (_, what), parts in values.parts.items():
        if (what == "C") == (kind == "capacitor"):
            needed.update(parts)
    have: Counter[float] = Counter()
    for pile in _piles(target, kind) or ():
        have[pile.value] += pile.count
    return needed - have


def with_more(target: Target, more: Parts) -> Target:
    """The target with more parts of some marked values in its stock."""
    for kind, counter in more.items():
        usual = target.resistor_tolerance if kind == "resistor" else target.capacitor_tolerance
        added = [Pile(value, count, value, usual) for value, count in counter.items() if count]
        piles = tuple(sorted([*(_piles(target, kind) or ()), *added], key=lambda pile: (pile.value, pile.tolerance)))
        values = tuple(dict.fromkeys(pile.value for pile in piles))
        if kind == "resistor":
            target = replace(target, resistors=values, resistor_piles=piles)
        else:
            target = replace(target, capacitors=values, capacitor_piles=piles)
    return target


def _piles(target: Target, kind: str) -> tuple[Pile, ...] | None:
    return target.resistor_piles if kind == "resistor" else target.capacitor_piles


def _sentence(kind: str, lacking: Counter[float], target: Target) -> str:
    """What of one kind has to be added; measured parts count by what is marked on them."""
    have: Counter[float] = Counter()
    for pile in _piles(target, kind) or ():
        have[pile.marked] += pile.count
    rows = []
    for value, short in sorted(lacking.items()):
        number, there = short + have[value], have[value]
        verb = "are" if number > 1 else "is"
        rows.append(f"{number} of {engineering(value, _UNITS[kind], 4)} {verb} needed, {there or 'none'} on hand")
    return (
        f"The stock has too few {kind}s: {'; '.join(rows)}. With {lacking.total()} more, of these values or of others "
        "near them, the board can be built."
    )
