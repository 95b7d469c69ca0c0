"""Exact arithmetic on small matrices and polynomials: lists of Fractions, polynomials by rising power."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from functools import lru_cache
from math import lcm
from typing import TypeAlias

import numpy as np

Vector: TypeAlias = tuple[Fraction, ...]
Matrix: TypeAlias = tuple[Vector, ...]

#: Newton steps that take an eigenvalue to the last bit of a float, its residual being exact.
_POLISH = 4
_BITS = 256
#: A part of a root below this share of its size is what the last step left.
_NOTHING = 1e-15


def short(value: Fraction | float) -> Fraction:
    """The nearest float as a Fraction, so that numbers do not grow without end."""
    return Fraction(float(value))


def long(value: Fraction) -> Fraction:
    """The same to 256 bits: far more digits than any condition of a matrix takes away, far fewer than powers have."""
    top, bottom = value.numerator, value.denominator
    shift = max(0, _BITS - top.bit_length() + bottom.bit_length())
    return Fraction((top << shift) // bottom, 1 << shift)


def dot(left: Sequence[Fraction], right: Sequence[Fraction]) -> Fraction:
    """Sum of products."""
    return sum((x * y for x, y in zip(left, right, strict=True) if x and y), Fraction(0))


def row_times(row: Vector, matrix: Matrix) -> Vector:
    """Row vector times matrix."""
    return tuple(
        sum((x * line[j] for x, line in zip(row, matrix, strict=True) if x and line[j]), Fraction(0))
        for j in range(len(matrix))
    )


def observability(output: Vector, matrix: Matrix) -> Matrix:
    """Rows c, c A, c A^2, ... as many as states."""
    rows = [output]
    while len(rows) < len(matrix):
        rows.append(row_times(rows[-1], matrix))
    return tuple(rows)


def solved(matrix: Matrix, right: Matrix) -> Matrix | None:
    """X of ``matrix @ X = right``, None where the matrix is singular.

    Elimination on integers, in which every division comes out even (Bareiss 1968, Sylvester's identity and multistep
    integer-preserving Gaussian elimination); Fractions would be shortened at every step.
    """
    n, before = len(matrix), 1
    rows = [_whole((*a, *b)) for a, b in zip(matrix, right, strict=True)]
    for k in range(n):
        pivot = max(range(k, n), key=lambda i: abs(rows[i][k]))
        if not rows[pivot][k]:
            return None
        rows[k], rows[pivot] = rows[pivot], rows[k]
        lead = rows[k]
        for i in range(n):
            if i != k:
                factor = rows[i][k]
                rows[i] = [(lead[k] * x - factor * y) // before for x, y in zip(rows[i], lead, strict=True)]
        before = lead[k]
    return tuple(tuple(Fraction(x, row[k]) for x in row[n:]) for k, row in enumerate(rows))


def _whole(row: Sequence[Fraction]) -> list[int]:
    common = lcm(*(x.denominator for x in row))
    return [x.numerator * (common // x.denominator) for x in row]


def transposed(matrix: Matrix) -> Matrix:
    """Rows and columns changed over."""
    return tuple(zip(*matrix, strict=True))


def derivative(polynomial: Vector) -> Vector:
    """Derivative of a polynomial."""
    return tuple(k * c for k, c in enumerate(polynomial) if k)


@lru_cache(maxsize=64)
def roots(polynomial: Vector) -> tuple[complex, ...]:
    """Roots with their multiplicities, each to the last bits of a float; conjugates are exact conjugates.

    Repeated roots are taken apart first (square-free factors; Yun 1976, On square-free decomposition algorithms), so
    that every root that is searched is simple.
    """
    found: list[complex] = []
    rest = _stripped(polynomial)
    while len(rest) > 1:
        common = _gcd(rest, derivative(rest))
        found += _simple_roots(_divided(rest, common)[0])
        rest = common
    return tuple(sorted(found, key=lambda z: (abs(z), z.real, z.imag)))


def share_a_root(left: Vector, right: Vector) -> bool:
    """Whether two polynomials have a root in common."""
    return len(_gcd(_stripped(left), _stripped(right))) > 1


def _stripped(polynomial: Sequence[Fraction]) -> Vector:
    size = max((k + 1 for k, c in enumerate(polynomial) if c), default=0)
    return tuple(polynomial[:size])


def _divided(top: Vector, bottom: Vector) -> tuple[Vector, Vector]:
    """Quotient and rest."""
    rest, quotient = list(top), [Fraction(0)] * max(len(top) - len(bottom) + 1, 0)
    for k in reversed(range(len(quotient))):
        quotient[k] = rest[k + len(bottom) - 1] / bottom[-1]
        for i, c in enumerate(bottom):
            rest[k + i] -= quotient[k] * c
    return tuple(quotient), _stripped(rest[: len(bottom) - 1])


def _gcd(left: Vector, right: Vector) -> Vector:
    while right:
        left, right = right, _divided(left, right)[1]
        right = tuple(c / right[-1] for c in right) if right else right
    return left


def _simple_roots(polynomial: Vector) -> list[complex]:
    """Roots of a polynomial without repeated ones: eigenvalues, then Newton steps with exact residuals."""
    # In units of the geometric mean of the roots, so that no power leaves the floats.
    zeros = next(k for k, c in enumerate(polynomial) if c)
    whole = polynomial[zeros:]
    degree = len(whole) - 1
    found = [0j] * zeros
    if not degree:
        return found
    size = _size(whole)
    scaled = tuple(c * size**k for k, c in enumerate(whole))
    floats = np.array([float(c / scaled[-1]) for c in scaled])
    slope = derivative(scaled)
    for guess in np.roots(floats[::-1]):
        root = complex(guess)
        if root.imag < 0:
            continue
        for _ in range(_POLISH):
            change = _valued(scaled, root) / (_valued(slope, root) or 1.0)
            root -= change
        if abs(root.real) <= _NOTHING * abs(root):
            root = complex(0.0, root.imag)
        if abs(root.imag) <= _NOTHING * abs(root):
            found.append(complex(root.real * float(size)))
        else:
            found += [root * float(size), root.conjugate() * float(size)]
    return found


def _size(polynomial: Vector) -> Fraction:
    """A power of 2 near the geometric mean of the roots."""
    bits = [c.numerator.bit_length() - c.denominator.bit_length() for c in (polynomial[0], polynomial[-1])]
    return Fraction(2) ** round((bits[0] - bits[1]) / (len(polynomial) - 1))


def _valued(polynomial: Vector, at: complex) -> complex:
    """Value at a complex float, computed exactly and rounded once."""
    x, y = Fraction(at.real), Fraction(at.imag)
    real = imaginary = Fraction(0)
    for c in reversed(polynomial):
        real, imaginary = real * x - imaginary * y + c, real * y + imaginary * x
    return complex(float(real), float(imaginary))
