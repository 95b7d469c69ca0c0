"""Work on expression trees: faults at a node, chains of products, derivatives."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from fractions import Fraction
from typing import NoReturn

from patchplan.equation.polynomial import Atom, Polynomial
from patchplan.equation.tree import Binary, Call, Minus, Name, Node, Number
from patchplan.errors import Fault, ProblemFaults

_ZERO, _ONE, _TWO = Number(Fraction(0)), Number(Fraction(1)), Number(Fraction(2))


def refuse(node: Node | None, found: str, remedy: str) -> NoReturn:
    """Stop with one fault at a node."""
    raise ProblemFaults([fault_at(node, found, remedy)])


def fault_at(node: Node | None, found: str, remedy: str) -> Fault:
    """A fault at the place a node comes from."""
    origin = node.origin if node is not None else None
    return Fault(found, remedy, origin.key, (origin.start, origin.end)) if origin else Fault(found, remedy)


def factors_of(node: Node) -> list[Node]:
    """Factors of a chain of products."""
    found: list[Node] = []
    while isinstance(node, Binary) and node.operator == "*":
        found.append(node.right)
        node = node.left
    return [node, *reversed(found)]


def product_of(factors: Sequence[Node]) -> Node:
    """Chain of products."""
    result = factors[0]
    for factor in factors[1:]:
        result = Binary("*", result, factor, result.origin)
    return result


def sum_tree(value: Polynomial, trees: Mapping[Atom, Node], *, rounded: bool = False) -> Node:
    """Tree of a polynomial, given a tree for each atom; ``rounded`` numbers are for names alone."""
    result: Node | None = None
    for powers, coefficient in value.terms.items():
        size = Fraction(f"{float(abs(coefficient)):.6g}") if rounded else abs(coefficient)
        part = _product_tree(size, powers, trees)
        if result is None:
            result = Minus(part) if coefficient < 0 else part
        else:
            result = Binary("-" if coefficient < 0 else "+", result, part)
    return result or Number(Fraction(0))


def _product_tree(coefficient: Fraction, powers: tuple[tuple[Atom, int], ...], trees: Mapping[Atom, Node]) -> Node:
    def power(atom: Atom, n: int) -> Node:
        return trees[atom] if n == 1 else Binary("^", trees[atom], Number(Fraction(n)))

    top = [power(a, n) for a, n in powers if n > 0]
    if coefficient != 1 or not top:
        top.insert(0, Number(coefficient))
    result = top[0]
    for factor in top[1:]:
        result = Binary("*", result, factor)
    for atom, n in powers:
        if n < 0:
            result = Binary("/", result, power(atom, -n))
    return result


def tree_derivative(node: Node) -> Node:
    """Derivative with respect to t of a tree in t alone.

    Raises
    ------
    ProblemFaults
        Where a function of time jumps.
    """
    return replace(_derivative(node), origin=node.origin)


def _derivative(node: Node) -> Node:
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
