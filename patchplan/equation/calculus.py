"""Time derivatives, symbolic and exact; never a difference quotient."""

from __future__ import annotations

from fractions import Fraction

from patchplan.equation.algebra import Algebra, refuse
from patchplan.equation.polynomial import Atom, Kind, Polynomial
from patchplan.equation.tree import Binary, Call, Minus, Name, Node, Number

_ZERO, _ONE, _TWO = Number(Fraction(0)), Number(Fraction(1)), Number(Fraction(2))


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


def tree_derivative(node: Node) -> Node:
    """Derivative with respect to t of a tree in t alone.

    Raises
    ------
    ProblemFaults
        Where a function of time jumps.
    """
    if isinstance(node, Number):
        return _ZERO
    if isinstance(node, Name):
        return _ONE if node.name == "t" else _ZERO
    if isinstance(node, Minus):
        return Minus(tree_derivative(node.operand), node.origin)
    if isinstance(node, Call):
        return _call_derivative(node)
    a, b = node.left, node.right
    if node.operator in "+-":
        return Binary(node.operator, tree_derivative(a), tree_derivative(b), node.origin)
    if node.operator == "*":
        return Binary("+", _times(tree_derivative(a), b), _times(a, tree_derivative(b)), node.origin)
    if node.operator == "/":
        top = Binary("-", _times(tree_derivative(a), b), _times(a, tree_derivative(b)))
        return Binary("/", top, Binary("^", b, _TWO), node.origin)
    if isinstance(b, Number):
        return _times(_times(b, Binary("^", a, Number(b.value - 1))), tree_derivative(a))
    # a^b = exp(b*log(a))
    return _times(node, tree_derivative(Binary("*", b, Call("log", (a,)))))


def _times(left: Node, right: Node) -> Node:
    return Binary("*", left, right, left.origin)


def _call_derivative(node: Call) -> Node:
    x = node.arguments[0]
    square = Binary("^", node, _TWO)
    outer: dict[str, Node] = {
        "sin": Call("cos", (x,)), "cos": Minus(Call("sin", (x,))), "tan": Binary("+", _ONE, square), "exp": node,
        "log": Binary("/", _ONE, x), "sqrt": Binary("/", _ONE, _times(_TWO, node)),
        "tanh": Binary("-", _ONE, square), "abs": Call("sign", (x,)), "ramp": Call("step", (x,)),
    }  # fmt: skip
    if node.function not in outer:
        refuse(
            node,
            f"The derivative of {node.function} is wanted, and {node.function} jumps.",
            "Supply the derivative as an input of its own.",
        )
    return _times(outer[node.function], tree_derivative(x))
