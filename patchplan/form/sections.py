"""Sections of first and second order: poles paired with zeros, in the order of a cascade."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from math import hypot, prod, sqrt

from patchplan.form.exact import Vector, roots, short

#: Poles closer than this share of their size are one pole to a sum of fractions, which then loses its digits.
CLOSEST = 1e-3


@dataclass(frozen=True)
class Section:
    """(b0 + b1 s + b2 s^2) / (a0 + a1 s + s^2), or one order lower.

    Attributes
    ----------
    poles
        One real pole, or two that are real or conjugate.
    numerator, denominator
        By rising power, as many as poles and one more; the denominator is monic.
    """

    poles: tuple[complex, ...]
    numerator: Vector
    denominator: Vector

    @property
    def turns(self) -> bool:
        """Whether the poles are a conjugate pair."""
        return bool(self.poles[0].imag)

    @property
    def quality(self) -> float:
        """Q of a pair: its size over twice its damping; 0 for real poles, infinite without damping."""
        if not self.turns:
            return 0.0
        damping = abs(self.poles[0].real)
        return abs(self.poles[0]) / (2 * damping) if damping else float("inf")

    @property
    def direct(self) -> Fraction:
        """What passes at once."""
        return self.numerator[-1]

    def proper(self) -> Vector:
        """Numerator of what is left without the direct share, by rising power."""
        return tuple(n - self.direct * d for n, d in zip(self.numerator[:-1], self.denominator[:-1], strict=True))


def cascade(numerator: Vector, denominator: Vector) -> tuple[Section, ...]:
    """Sections in series: every pair of poles with the zeros nearest to it, low Q first.

    Zeros go to the pair of highest Q first, as its peak is what they lower most; sections of low Q come first, so that
    a later peak finds its signal filtered already (common practice; Moschytz 1970, A general approach to the optimum
    design of cascaded RC active filters, weighs all orders by their swings). Real poles become sections of first order,
    which need no loop, but for those that a pair of zeros has to be put upon.
    """
    zeros = roots(_trimmed(numerator))
    pairs = [z for z in zeros if z.imag > 0]
    reals = sorted(z.real for z in zeros if not z.imag)
    groups = _pole_groups(roots(denominator), len(pairs))
    groups.sort(key=lambda g: (-len(g), -_quality(g), abs(g[0])))
    room = sum(len(g) for g in groups)
    made: list[tuple[tuple[complex, ...], list[complex]]] = []
    for group in groups:
        taken: list[complex] = []
        if pairs and len(group) == 2:
            nearest = min(pairs, key=lambda z: abs(z - group[0]))
            pairs.remove(nearest)
            taken = [nearest, nearest.conjugate()]
        else:
            # Real zeros are shared out evenly: one to each pair of a band-pass.
            free = room - 2 * len(pairs)
            share = -(-len(reals) * len(group) // free) if free else 0
            for _ in range(min(share, len(group), len(reals))):
                taken.append(min(reals, key=lambda z: abs(z - group[0])))
                reals.remove(taken[-1].real)
        room -= len(group)
        made.append((group, taken))
    made.sort(key=lambda m: (_quality(m[0]), abs(m[0][0])))
    return _levelled([(p, _product(z), _product(p)) for p, z in made], numerator)


def fractions(numerator: Vector, denominator: Vector) -> tuple[Section, ...] | None:
    """Sections in parallel, without the direct share; None where poles lie too close together for a sum."""
    poles = roots(denominator)
    ordered = sorted(poles, key=lambda p: (p.real, p.imag))
    size = max(map(abs, poles))
    if any(abs(a - b) < CLOSEST * (max(abs(a), abs(b)) or size) for a, b in pairwise(ordered)):
        return None
    made = []
    proper = tuple(n - numerator[-1] * d for n, d in zip(numerator[:-1], denominator[:-1], strict=True))
    for pole in (p for p in poles if p.imag >= 0):
        apart = prod((pole - other for other in poles if other is not pole), start=1 + 0j)
        share = _valued(proper, pole) / apart
        if pole.imag:
            top = (short(-2 * (share * pole.conjugate()).real), short(2 * share.real), Fraction(0))
            made.append(Section((pole, pole.conjugate()), top, _product((pole, pole.conjugate()))))
        else:
            made.append(Section((pole,), (short(share.real), Fraction(0)), _product((pole,))))
    return tuple(sorted(made, key=lambda s: (s.quality, abs(s.poles[0]))))


def _trimmed(polynomial: Vector) -> Vector:
    size = max((k + 1 for k, c in enumerate(polynomial) if c), default=0)
    return polynomial[:size] or (Fraction(1),)


def _valued(polynomial: Vector, at: complex) -> complex:
    total = 0j
    for c in reversed(polynomial):
        total = total * at + float(c)
    return total


def _pole_groups(poles: Sequence[complex], zero_pairs: int) -> list[tuple[complex, ...]]:
    """Conjugate pairs and single real poles; neighbours among these joined where pairs of zeros need the room."""
    turning = [(p, p.conjugate()) for p in poles if p.imag > 0]
    reals = sorted((p for p in poles if not p.imag), key=abs)
    joined = 2 * max(0, zero_pairs - len(turning))
    pairs = [(reals[i], reals[i + 1]) for i in range(0, joined, 2)]
    return [*turning, *pairs, *((p,) for p in reals[joined:])]


def _quality(poles: tuple[complex, ...]) -> float:
    return Section(poles, (), ()).quality


def _product(zeros: Sequence[complex]) -> Vector:
    """Monic polynomial of one or two roots (real or conjugate), or 1, coefficients as floats."""
    if len(zeros) < 2:
        return (*(short(-z.real) for z in zeros), Fraction(1))
    first, second = zeros
    size = hypot(first.real, first.imag) ** 2 if first.imag else first.real * second.real
    return short(size), short(-(first.real + second.real)), Fraction(1)


def _levelled(parts: Sequence[tuple[tuple[complex, ...], Vector, Vector]], numerator: Vector) -> tuple[Section, ...]:
    """Sections with a level of their own: 1 at rest, or at its pole's frequency where nothing passes at rest."""
    whole = _trimmed(numerator)[-1]
    made = []
    for i, (poles, top, bottom) in enumerate(parts):
        level = whole if i == len(parts) - 1 else short(_level(poles, top, bottom))
        whole /= level
        padded = (*(level * c for c in top), *(Fraction(0) for _ in range(len(bottom) - len(top))))
        made.append(Section(poles, tuple(map(short, padded)), bottom))
    return tuple(made)


def _level(poles: tuple[complex, ...], top: Vector, bottom: Vector) -> float:
    if top[0] and bottom[0]:
        return abs(float(bottom[0] / top[0]))
    at = 1j * (sqrt(abs(float(bottom[0]))) if len(poles) == 2 else abs(poles[0])) or 1j
    return abs(_valued(bottom, at) / (_valued(top, at) or 1.0)) or 1.0
