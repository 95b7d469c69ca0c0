"""Texts of signals, and net names: legal in any SPICE, unique without regard to case."""

from __future__ import annotations

import re
from collections.abc import Iterable

from patchplan.equation.system import Monomial, Term

#: Key of the board's constant.
REFERENCE = "1"

#: Names that a simulator or the board itself takes.
_TAKEN = frozenset({"0", "gnd", "ref", "vcc", "vee", "vdd", "vss", "time", "null"})
#: Endings that the circuit gives to the inner nets of a stage.
_INNER = re.compile(r".*_(bus|inv|ic|t\d*|w)$")


def key_of(factors: Monomial) -> str:
    """Unique text of what a node carries; a single signal keeps its name."""
    return "*".join(n if p == 1 else f"{n}^{p}" for n, p in factors) or REFERENCE


def sum_text(terms: Iterable[Term]) -> str:
    """Readable and exact: ``y - 3/2*z``."""
    text = ""
    for term in terms:
        size = abs(term.coefficient)
        parts = ([] if size == 1 and term.factors else [str(size)]) + ([key_of(term.factors)] if term.factors else [])
        joint = " - " if term.coefficient < 0 else " + "
        text += (joint if text else joint.strip(" +")) + "*".join(parts)
    return text


def shortened(wish: str, most: int = 14) -> str:
    """A wish for a name of a product or sum without its coefficients and cut to ``most``, where it is longer."""
    if len(wish) <= most:
        return wish
    return "_".join(re.findall(r"[A-Za-z0-9]+", re.sub(r"\b\d+(/\d+)?\*", "", wish)))[:most].strip("_")


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
