"""The stock while a board is laid down: each piece is taken once."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from patchplan.errors import CannotBuild
from patchplan.quantity import engineering
from patchplan.sizing.records import Pile, Target

_UNITS = {"resistor": "Ω", "capacitor": "F"}


@dataclass
class Ledger:
    """Piles left, by kind of part; a kind that is absent is not counted."""

    piles: dict[str, list[Pile]] = field(default_factory=dict)

    @classmethod
    def of(cls, target: Target) -> Ledger:
        """All parts on hand."""
        kinds = {"resistor": target.resistor_piles, "capacitor": target.capacitor_piles}
        return cls({kind: list(piles) for kind, piles in kinds.items() if piles is not None})

    def take(self, kind: str, value: float) -> Pile | None:
        """One piece, of the closest tolerance there is; None where the kind is not counted.

        Raises
        ------
        CannotBuild
            Where none is left.
        """
        if kind not in self.piles:
            return None
        piles = self.piles[kind]
        for i, pile in enumerate(piles):
            if pile.value == value and pile.count:
                piles[i] = replace(pile, count=pile.count - 1)
                return pile
        raise CannotBuild(f"The stock has no {kind} of {engineering(value, _UNITS[kind], 4)} left. Add one.")
