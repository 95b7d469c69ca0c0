"""Which combinations nothing beats, which is the cheapest that will do, and which comes nearest where none does."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace

import numpy as np

from patchplan.compare.records import Option, Wish

#: Supply currents this many times apart or less tie.
EVEN = 1.1


def marked(options: Sequence[Option]) -> tuple[Option, ...]:
    """The options with ``best`` set on those that can be built and that no other one dominates."""
    figures = np.array([o.figures for o in options if not o.fault]).reshape(-1, 5)
    nowhere_worse = (figures[:, None] <= figures[None, :]).all(axis=2)
    beaten = np.asarray((nowhere_worse & ~nowhere_worse.T).any(axis=0))
    found = iter(beaten)
    return tuple(o if o.fault else replace(o, best=not next(found)) for o in options)


def cheapest_first(options: Iterable[Option], wish: Wish) -> list[Option]:
    """Options that meet a wish, cheapest first.

    The catalogue has no prices: fewer packages are cheaper, then fewer parts, then a coarser tolerance of the
    resistors, then of the capacitors, then less current. Currents are estimates: those within :data:`EVEN` of the least
    of a group tie, and among them the smaller spread goes first, then the smaller error.
    """
    left = sorted((o for o in options if not o.fault and excess(o, wish) <= 1.0), key=_cost)
    ranked: list[Option] = []
    while left:
        first = left[0]
        tied = [o for o in left if _cost(o)[:-1] == _cost(first)[:-1]
                and o.supply_current <= EVEN * first.supply_current]  # fmt: skip
        ranked += sorted(tied, key=lambda o: (o.spread_percent, o.error_percent, o.supply_current))
        left = left[len(tied) :]
    return ranked


def _cost(option: Option) -> tuple[float, ...]:
    coarse = option.build.resistor_tolerance, option.build.capacitor_tolerance
    return option.packages, option.parts, -coarse[0], -coarse[1], option.supply_current


def excess(option: Option, wish: Wish) -> float:
    """How many times too large the worse of an option's figures is, up to 1 where the wish is met."""
    shares = [_share(option.error_percent, wish.error_percent)]
    if wish.spread_percent is not None:
        shares.append(_share(option.spread_percent, wish.spread_percent))
    return max(shares)


def _share(figure: float, limit: float) -> float:
    return figure / limit if limit > 0 else (0.0 if figure == 0 else float("inf"))


def nearest(options: Iterable[Option], wish: Wish) -> Option | None:
    """The option that misses a wish by least; None where nothing can be built."""
    built = [o for o in options if not o.fault]
    return min(built, key=lambda o: (excess(o, wish), *o.figures), default=None)
