"""Sparse polynomials with exact coefficients, in signals, sources, functions of time and adjustable parameters."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from enum import IntEnum
from fractions import Fraction
from math import comb
from typing import NamedTuple, TypeAlias

from patchplan.equation.tree import Origin

#: Largest number of terms that a product or a power may have, and largest degree in signals.
MOST_TERMS = 2000
HIGHEST_DEGREE = 20


class Kind(IntEnum):
    """What an atom stands for."""

    PARAMETER = 0  # a function of adjustable parameters
    TIME = 1  # a known function of time
    SOURCE = 2  # an input that arrives as it is: a recording, a bounded one, one with a terminal
    RATE = 3  # a derivative of an input
    SIGNAL = 4  # an unknown with its primes, or a definition


class Atom(NamedTuple):
    """One symbol of a polynomial."""

    kind: Kind
    name: str
    primes: int = 0

    @property
    def text(self) -> str:
        """Name with prime marks."""
        return self.name + "'" * self.primes


#: Powers of atoms, sorted by atom; () is 1. Powers of parameters and of functions of time may be negative.
Powers: TypeAlias = tuple[tuple[Atom, int], ...]


class TooLargeError(Exception):
    """An expansion would exceed MOST_TERMS or HIGHEST_DEGREE."""


class Polynomial:
    """Sum of coefficient * powers; never changed after it is made.

    Attributes
    ----------
    terms
        Powers -> coefficient, without zeros.
    places
        Powers -> where in the file the term comes from; outside equality.
    """

    __slots__ = ("places", "terms")

    def __init__(self, terms: Mapping[Powers, Fraction], places: Mapping[Powers, Origin] | None = None) -> None:
        self.terms = {p: c for p, c in terms.items() if c}
        self.places = dict(places or {})

    @classmethod
    def constant(cls, value: Fraction | int, origin: Origin | None = None) -> Polynomial:
        """A number."""
        return cls({(): Fraction(value)}, {(): origin} if origin else None)

    @classmethod
    def of(cls, atom: Atom, power: int = 1, origin: Origin | None = None) -> Polynomial:
        """A power of one atom."""
        key = ((atom, power),)
        return cls({key: Fraction(1)}, {key: origin} if origin else None)

    @classmethod
    def sum(cls, parts: Iterable[Polynomial]) -> Polynomial:
        """Sum of many; linear in the number of terms."""
        terms: dict[Powers, Fraction] = {}
        places: dict[Powers, Origin] = {}
        for part in parts:
            for powers, value in part.terms.items():
                terms[powers] = terms.get(powers, Fraction(0)) + value
            for powers, place in part.places.items():
                places.setdefault(powers, place)
        return cls(terms, places)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Polynomial) and self.terms == other.terms

    def __hash__(self) -> int:
        return hash(frozenset(self.terms.items()))

    def __len__(self) -> int:
        return len(self.terms)

    def __repr__(self) -> str:
        return " + ".join(
            "*".join([str(c), *(a.text if n == 1 else f"{a.text}^{n}" for a, n in p)]) for p, c in self.terms.items()
        )

    def __add__(self, other: Polynomial) -> Polynomial:
        return Polynomial.sum((self, other))

    def __sub__(self, other: Polynomial) -> Polynomial:
        return Polynomial.sum((self, other.scaled(Fraction(-1))))

    def __mul__(self, other: Polynomial) -> Polynomial:
        if len(self) * len(other) > MOST_TERMS or self.degree + other.degree > HIGHEST_DEGREE:
            raise TooLargeError
        terms: dict[Powers, Fraction] = {}
        places: dict[Powers, Origin] = {}
        for left, a in self.terms.items():
            for right, b in other.terms.items():
                powers = multiply(left, right)
                terms[powers] = terms.get(powers, Fraction(0)) + a * b
                place = self.places.get(left) or other.places.get(right)
                if place:
                    places.setdefault(powers, place)
        return Polynomial(terms, places)

    def __pow__(self, exponent: int) -> Polynomial:
        if self.degree * exponent > HIGHEST_DEGREE or comb(len(self) + exponent - 1, exponent) > MOST_TERMS:
            raise TooLargeError
        result = Polynomial.constant(1)
        for _ in range(exponent):
            result = result * self
        return result

    def scaled(self, factor: Fraction) -> Polynomial:
        """The polynomial times a number."""
        return Polynomial({p: c * factor for p, c in self.terms.items()}, self.places)

    def placed(self, origin: Origin | None) -> Polynomial:
        """The polynomial with all its terms said to come from ``origin``."""
        return Polynomial(self.terms, dict.fromkeys(self.terms, origin)) if origin else self

    @property
    def degree(self) -> int:
        """Largest number of signals, sources and input derivatives multiplied."""
        return max((degree(p) for p in self.terms), default=0)

    @property
    def value(self) -> Fraction | None:
        """The number that the polynomial is, or None."""
        if not self.terms:
            return Fraction(0)
        return self.terms.get(()) if len(self.terms) == 1 else None

    def atoms(self) -> set[Atom]:
        """All atoms in it."""
        return {a for powers in self.terms for a, _ in powers}

    def kinds(self) -> set[Kind]:
        """Kinds of all atoms in it."""
        return {a.kind for powers in self.terms for a, _ in powers}

    def inverse(self) -> Polynomial:
        """One over a polynomial of one term."""
        ((powers, value),) = self.terms.items()
        return Polynomial({tuple((a, -n) for a, n in powers): 1 / value}, None)

    def substitute(self, values: Mapping[Atom, Polynomial]) -> Polynomial:
        """Put polynomials in the place of atoms (which stand in positive powers)."""
        parts: list[Polynomial] = []
        plain: dict[Powers, Fraction] = {}
        for powers, value in self.terms.items():
            found = [(a, n) for a, n in powers if a in values]
            if not found:
                plain[powers] = value
                continue
            part = Polynomial({tuple(x for x in powers if x[0] not in values): value})
            for atom, power in found:
                part = part * values[atom] ** power
            parts.append(part.placed(self.places.get(powers)))
        return Polynomial.sum([Polynomial(plain, self.places), *parts]) if parts else self

    def derivative(self, rule: Callable[[Atom], Polynomial]) -> Polynomial:
        """Time derivative, given the time derivative of every atom."""
        parts = []
        for powers, value in self.terms.items():
            for position, (atom, power) in enumerate(powers):
                rest = (*powers[:position], *(((atom, power - 1),) if power != 1 else ()), *powers[position + 1 :])
                part = Polynomial({rest: value * power}) * rule(atom)
                parts.append(part.placed(self.places.get(powers)))
        return Polynomial.sum(parts)

    def at(self, values: Mapping[Atom, Fraction]) -> Fraction:
        """Value where every atom has a number."""
        total = Fraction(0)
        for powers, value in self.terms.items():
            for atom, power in powers:
                value *= values[atom] ** power
            total += value
        return total


def multiply(left: Powers, right: Powers) -> Powers:
    """Product of two products of powers."""
    if not left or not right:
        return left or right
    powers = dict(left)
    for atom, power in right:
        powers[atom] = powers.get(atom, 0) + power
    return tuple(sorted((a, n) for a, n in powers.items() if n))


def degree(powers: Powers) -> int:
    """Number of signals, sources and input derivatives multiplied."""
    return sum(n for a, n in powers if a.kind >= Kind.SOURCE)


def part(powers: Powers, *kinds: Kind) -> Powers:
    """The factors of the given kinds."""
    return tuple(x for x in powers if x[0].kind in kinds)
