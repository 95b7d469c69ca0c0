"""Formulas to trees: precedence, places, limits; and exact values of constant trees."""

from __future__ import annotations

from fractions import Fraction

import pytest
import sympy
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from sympy.parsing.sympy_parser import auto_number, auto_symbol, rationalize

from patchplan.equation.constants import PI, constant_value, is_constant, names_of
from patchplan.equation.syntax import MAX_DEGREE, MAX_DEPTH, check_growth, parse_equation, parse_expression
from patchplan.equation.tokens import MAX_LENGTH, MAX_PARENTHESES
from patchplan.equation.tree import Binary, Call, Minus, Name, Number, Origin, text_of
from patchplan.errors import ProblemFaults


def fault_of(text, names=()):
    with pytest.raises(ProblemFaults) as caught:
        parse_expression(text, "k", names=names)
    (fault,) = caught.value.faults
    return fault


def sympy_of(tree):
    """The tree as a sympy expression, built node by node."""
    if isinstance(tree, Number):
        return sympy.Rational(tree.value.numerator, tree.value.denominator)
    if isinstance(tree, Name):
        return sympy.Symbol(tree.name + "_p" * tree.primes)
    if isinstance(tree, Minus):
        return -sympy_of(tree.operand)
    if isinstance(tree, Call):
        return getattr(sympy, {"abs": "Abs"}.get(tree.function, tree.function))(*map(sympy_of, tree.arguments))
    left, right = sympy_of(tree.left), sympy_of(tree.right)
    return {"+": left + right, "-": left - right, "*": left * right, "/": left / right, "^": left**right}[tree.operator]


# sympy reads the same text with Python's precedence, which is the precedence wanted once ^ is written **.
@pytest.mark.parametrize(
    "text",
    [
        "-x^2", "2^-x", "a^b^c", "-a^-b^c", "a-b-c", "a/b/c", "a/b*c", "a*-b", "a - -b", "-a*b^2/c", "+a - +b",
        "a + b*c^d - e/f", "(a + b)*(c - d)", "-(a - b)^2", "a*(b + c)/(d*e)", "2*x**3**2", "1/3*x", "--a",
        "sin(x)^2 + exp(-x*y)", "sqrt(a/b)*log(c)", ".5*x - 1.25e1*y", "((((x))))", "tanh(a)-abs(-b)",
    ],
)  # fmt: skip
def test_precedence_agrees_with_sympy(text):
    wanted = sympy.parse_expr(text.replace("^", "**"), transformations=(auto_symbol, rationalize, auto_number))
    assert wanted - sympy_of(parse_expression(text)) == 0


def test_tree_with_places():
    tree = parse_expression("-4.7k * z'' + sin(t)", "equations[0]")
    product = Binary("*", Minus(Number(Fraction(4700))), Name("z", 2))
    assert tree == Binary("+", product, Call("sin", (Name("t"),)))
    assert tree.origin == Origin("equations[0]", 0, 20)
    assert tree.left.left.operand.origin == Origin("equations[0]", 1, 5)
    assert tree.left.right.origin == Origin("equations[0]", 8, 11)
    assert [str(n.name) + "'" * n.primes for n in names_of(tree)] == ["z''", "t"]


def test_literals_stay_exact():
    assert parse_expression("0.1").value == Fraction(1, 10)
    assert parse_expression("3u").value == Fraction(3, 10**6)
    assert parse_expression("2E3").value == 2000


def test_equation_is_split_at_its_sign():
    equation = parse_equation("m*z'' = -k*z", 3)
    assert (text_of(equation.left), text_of(equation.right)) == ("m*z''", "(-k)*z")
    assert equation.key == "equations[3]"
    assert equation.right.origin == Origin("equations[3]", 8, 12)


@pytest.mark.parametrize(
    ("text", "span", "found", "remedy"),
    [
        ("2 x", (2, 3), 'follows "2" without a sign', "Write * for a product"),
        ("2x", (0, 2), "a product needs its sign", "Write 2*x."),
        ("2kx", (0, 3), "a product needs its sign", "Write 2*kx."),
        ("x(1)", (0, 1), '"x" is no function', "Write x*(...) for a product"),
        ("x'(t)", (0, 2), '"x\'" is no function', "Write x'*(...)"),
        ("sine(x)", (0, 4), "is no function", "Did you mean sin?"),
        ("(a)(b)", (3, 4), 'follows ")" without a sign', "Write *"),
        ("x y'", (2, 4), 'follows "x"', "Write *"),
        ("sin", (0, 3), "is a function and cannot name a signal", "sin(...)"),
        ("sin'", (0, 4), "is taken", "another name"),
        ("pi'", (0, 3), "is taken", "another name"),
        ("pulse(t, 1)", (0, 11), "takes 3 arguments, here are 2", "pulse(t, start, width)"),
        ("sin()", (0, 5), "takes 1 argument, here are 0", "sin(x)"),
        ("(x", (0, 1), "never closed", 'Add the ")"'),
        ("x)", (1, 2), "closes nothing", "Remove it"),
        ("x +", (2, 3), "ends where a value is wanted", "Write a number"),
        ("", (0, 0), "ends where a value is wanted", "Write a number"),
        ("* x", (0, 1), '"*" stands where a value is wanted', "Write a number"),
        ("x − y", (2, 3), "means nothing in a formula", "Write - instead"),
        ("x.real", (1, 2), "means nothing in a formula", "Use + - * /"),
        ("__import__('os')", (11, 12), "prime mark follows no name", "right after the name"),
        ("x = 1", (2, 3), 'holds no "="', "right side alone"),
        ("1.2.3", (0, 4), "followed by another number", "one decimal point"),
        ("1e999 + x", (0, 5), "exponent beyond 100", "usual size"),
        ("a, b", (1, 2), '"," stands where', "Write a number"),
        ("x/(2 - 2)", (3, 8), "divides by zero", "another value"),
        ("2^0.5^999999", (2, 12), "power is too large", "usual size"),
    ],
)
def test_bad_formula_is_pointed_at(text, span, found, remedy):
    fault = fault_of(text)
    assert found in fault.found
    assert remedy in fault.remedy
    assert fault.key == "k"
    assert fault.span == span


def test_suffix_that_is_a_name_is_refused():
    fault = fault_of("3 + 2k", names={"k"})
    assert fault.remedy == "Write 2*k or 2e3."
    assert fault.span == (4, 6)
    assert parse_expression("2k", names={"m"}).value == 2000


@pytest.mark.parametrize(
    ("text", "found"), [("x", 'has no "="'), ("a = b = c", 'a second "="'), ("t = 1", "is the time")]
)
def test_bad_equation(text, found):
    with pytest.raises(ProblemFaults, match=found):
        parse_equation(text, 0)


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("9^9^9^9", "power is too large"),
        ("9^-9^9^9", "power is too large"),
        ("x^9^9^9", "power is too large"),
        ("x^99999999", "a degree over a million"),
        ("(" * 5000 + ")" * 5000, "characters long"),
        ("(" * 50 + "x" + ")" * 50, f"nested deeper than {MAX_PARENTHESES}"),
        ("sin(" * 50 + "x" + ")" * 50, f"nested deeper than {MAX_PARENTHESES}"),
        ("-" * 3000 + "x", "nested deeper than"),
        ("x" + "^x" * 500, "nested deeper than"),
        ("+".join("x" * 1500), f"a chain of over {MAX_DEPTH}"),
        ("(x+y+z)^60", "degree 60"),
        ("(a+b+c+d+e+f+g+h)^9", "up to 11440 terms"),
        ("(((x^9)^9)^9)^9", "degree 81"),
        ("x" * (MAX_LENGTH + 1), "characters long"),
    ],
)
def test_what_would_hang_later_is_refused_here(text, found):
    assert found in fault_of(text).found


def test_term_bound_is_the_multinomial_count():
    # 11440 above and 1891 here: sympy's own expansion has as many terms.
    tree = parse_expression("(a+b+c)^7")
    assert check_growth(tree, "k") == (7, len(sympy.expand(sympy_of(tree)).args))
    assert MAX_DEGREE >= 7


NAMES = st.sampled_from(["x", "y", "z'", "beta", "t", "pi"])
LEAVES = st.one_of(NAMES, st.integers(0, 99).map(str), st.decimals(0, 99, places=2).map(str))
FORMULAS = st.recursive(
    LEAVES,
    lambda inner: st.one_of(
        st.tuples(inner, st.sampled_from("+-*"), inner).map(lambda p: f"({p[0]}){p[1]}({p[2]})"),
        inner.map(lambda p: f"-({p})"),
        inner.map(lambda p: f"({p})^2"),
        inner.map(lambda p: f"sin({p})"),
    ),
    max_leaves=8,
)


# The first use of sympy takes long, whatever the formula.
@settings(deadline=None)
@given(FORMULAS)
def test_canonical_text_reads_back(text):
    try:
        tree = parse_expression(text)
    except ProblemFaults:
        # Squares of squares may pass the limits of degree and size.
        assume(False)
    again = parse_expression(text_of(tree))
    assert text_of(again) == text_of(tree)
    assert sympy_of(again) - sympy_of(tree) == 0


@given(st.text(alphabet="xyk0123456789.e+-*/^()',= \tsinpt", max_size=60))
def test_any_text_gives_a_tree_or_one_fault_inside_it(text):
    try:
        tree = parse_expression(text, "k")
    except ProblemFaults as error:
        (fault,) = error.faults
        start, end = fault.span
        assert 0 <= start <= end <= len(text)
    else:
        assert tree.origin is not None
        assert tree.origin.key == "k"


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("8/3", Fraction(8, 3)),
        ("a^2 - 1/b", Fraction(9) - Fraction(1, 7)),
        ("sqrt(4/9)", Fraction(2, 3)),
        ("(4/9)^(3/2)", Fraction(8, 27)),
        ("(-2)^-3", Fraction(-1, 8)),
        ("(-1)^99999", Fraction(-1)),
        ("0^0", Fraction(1)),
        ("abs(-2/7)", Fraction(2, 7)),
        ("sign(-3) + sign(0)", Fraction(-1)),
        ("sin(pi)", Fraction(0)),
        ("cos(pi/2)", Fraction(0)),
        ("cos(7*pi)", Fraction(-1)),
        ("exp(0) + log(1)", Fraction(1)),
    ],
)
def test_constant_value_is_exact(text, value):
    assert constant_value(parse_expression(text), {"a": Fraction(3), "b": Fraction(7)}) == value


@pytest.mark.parametrize(
    "text", ["sqrt(2)", "2^(1/3)", "exp(1.5)", "log(7)", "sin(1)", "cos(100)", "tan(2)", "tanh(0.3)", "pi^2", "sin(-9)"]
)
def test_irrational_values_agree_with_sympy(text):
    tree = parse_expression(text)
    wanted = sympy_of(tree).subs(sympy.Symbol("pi"), sympy.pi)
    assert float(constant_value(tree, {})) == pytest.approx(float(wanted.evalf(30)), rel=4e-16)


def test_pi_is_good_to_its_last_digit():
    assert abs(sympy.Rational(PI.numerator, PI.denominator) - sympy.pi.evalf(60)) < 1e-50


@pytest.mark.parametrize(
    ("text", "found", "span"),
    [
        ("1 + 1/(a - a)", "divides by zero", (6, 13)),
        ("log(-a)", "logarithm of zero or less", (0, 7)),
        ("2*sqrt(-a)", "root of a negative number", (2, 10)),
        ("(-a)^(1/3)", "broken power", (0, 10)),
        ("exp(a^9)", "no finite value", (0, 8)),
        ("tan(pi/2)", "no finite value", (0, 9)),
        ("(a - a)^-a", "zero to a negative power", (0, 10)),
        ("a^a^a^a", "too large", (2, 7)),
        ("q + 1", '"q" is no parameter', (0, 1)),
        ("step(a)", "function of time", (0, 7)),
    ],
)
def test_values_that_do_not_exist(text, found, span):
    tree = parse_expression(text, "k")
    with pytest.raises(ProblemFaults, match=found) as caught:
        constant_value(tree, {"a": Fraction(9)})
    start, end = caught.value.faults[0].span
    assert (start, end) == span or text[start:end].strip("()") == text[span[0] : span[1]].strip("()")


def test_is_constant():
    assert is_constant(parse_expression("2*pi + sin(1)"))
    assert not is_constant(parse_expression("2*x"))
    assert not is_constant(parse_expression("step(1)"))
