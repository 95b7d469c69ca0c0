"""Net names: legal in any SPICE, unique without regard to case."""

from __future__ import annotations

import re

#: Names that a simulator or the board itself takes.
_TAKEN = frozenset({"0", "gnd", "ref", "vcc", "vee", "vdd", "vss", "time", "null"})
#: Endings that the circuit gives to the inner nets of a stage.
_INNER = re.compile(r".*_(bus|inv|ic|t\d*|w)$")


class Names:
    """Hands out unused names; the same requests in the same order give the same names."""

    def __init__(self) -> None:
        self._used: set[str] = set(_TAKEN)

    def node(self, wish: str) -> str:
        """Net name near ``wish``: ``z''`` becomes ``z_d2``, a second ``X`` beside ``x`` becomes ``x_2``."""
        primes = len(wish) - len(wish.rstrip("'"))
        base = re.sub(r"[^a-z0-9]+", "_", wish.rstrip("'").lower()).strip("_") or "node"
        base += f"_d{primes if primes > 1 else ''}" if primes else ""
        if base[0].isdigit() or _INNER.match(base):
            base = f"n_{base}" if base[0].isdigit() else f"{base}_n"
        return self._unused(base)

    def _unused(self, base: str) -> str:
        name, number = base, 2
        while name in self._used:
            name, number = f"{base}_{number}", number + 1
        self._used.add(name)
        return name
