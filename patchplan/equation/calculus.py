"""Time derivatives, symbolic and exact; never a difference quotient."""

from __future__ import annotations

from patchplan.equation.algebra import Algebra
from patchplan.equation.formula import tree_derivative
from patchplan.equation.polynomial import Atom, Kind, Polynomial


def derivative(value: Polynomial, algebra: Algebra) -> Polynomial:
    """Time derivative of a polynomial; inputs give atoms of kind RATE, unknowns one prime more."""
    return value.derivative(lambda atom: rate_of(atom, algebra))


def rate_of(atom: Atom, algebra: Algebra) -> Polynomial:
    """Time derivative of one atom."""
    if atom.kind is Kind.PARAMETER:
        return Polynomial.constant(0)
    if atom.kind is Kind.SIGNAL:
        return Polynomial.of(Atom(Kind.SIGNAL, atom.name, atom.primes + 1))
    if atom.kind in (Kind.SOURCE, Kind.RATE) or atom.name in algebra.named:
        return Polynomial.of(Atom(Kind.RATE, atom.name, atom.primes + 1))
    return algebra.polynomial(tree_derivative(algebra.functions[atom]))
