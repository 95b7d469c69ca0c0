"""Sparse polynomials against sympy's."""

from fractions import Fraction

import pytest
import sympy
from hypothesis import given, settings
from hypothesis import strategies as st

from patchplan.equation.polynomial import Atom, Kind, Polynomial, TooLargeError

NAMES = "xyz"


@st.composite
def polynomials(draw):
    terms = draw(st.dictionaries(st.tuples(*[st.integers(0, 3)] * 3), st.fractions(-3, 3, max_denominator=7)))
    made = {
        tuple((Atom(Kind.SIGNAL, n), p) for n, p in zip(NAMES, powers, strict=True) if p): c
        for powers, c in terms.items()
    }
    return Polynomial(made)


def as_sympy(value):
    return sum(
        (
            sympy.Rational(c.numerator, c.denominator) * sympy.prod(sympy.Symbol(a.name) ** n for a, n in powers)
            for powers, c in value.terms.items()
        ),
        sympy.Integer(0),
    )


@settings(deadline=None)
@given(polynomials(), polynomials(), polynomials())
def test_ring_operations_and_substitution_are_sympys(a, b, c):
    assert sympy.expand(as_sympy(a + b) - as_sympy(a) - as_sympy(b)) == 0
    assert sympy.expand(as_sympy(a * b) - as_sympy(a) * as_sympy(b)) == 0
    x = Atom(Kind.SIGNAL, "x")
    line = Polynomial.of(Atom(Kind.SIGNAL, "y")).scaled(Fraction(2)) + Polynomial.constant(1)
    expected = as_sympy(c).subs(sympy.Symbol("x"), 2 * sympy.Symbol("y") + 1)
    assert sympy.expand(as_sympy(c.substitute({x: line})) - expected) == 0


def test_an_expansion_beyond_the_limits_is_refused_before_it_is_made():
    many = Polynomial.sum(Polynomial.of(Atom(Kind.SIGNAL, n)) for n in "abcdef")
    with pytest.raises(TooLargeError):
        many**15
    with pytest.raises(TooLargeError):
        Polynomial.of(Atom(Kind.SIGNAL, "x")) ** 60
