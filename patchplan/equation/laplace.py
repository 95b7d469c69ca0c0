"""One rational block in the Laplace operator, realised at rest in observer form."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import NoReturn

from patchplan.equation.algebra import Algebra
from patchplan.equation.constants import names_of
from patchplan.equation.formula import product_of, refuse, sum_tree
from patchplan.equation.polynomial import Atom, Kind, Polynomial, part
from patchplan.equation.problem import Equation
from patchplan.equation.tree import Binary, Minus, Name, Node, Number
from patchplan.errors import ProblemFaults

_OPERATOR = Atom(Kind.SIGNAL, "s")


@dataclass(frozen=True)
class Realised:
    """First-order equations of a block.

    Attributes
    ----------
    rates
        Rate of every state of the block; all start at 0.
    definitions
        The output where it is no state, and the input where it is more than one signal.
    """

    rates: dict[Atom, Polynomial]
    definitions: dict[Atom, Polynomial]


def realise(equation: Equation, algebra: Algebra, taken: frozenset[str]) -> Realised:
    """States of ``y = N(s)/D(s) * u`` in observer form: x_k' = x_(k-1) + b_(k-1) u - a_(k-1) y.

    Raises
    ------
    ProblemFaults
        For an improper block, and for every use of ``s`` beyond one rational factor of one term.
    """
    left = equation.left
    if not isinstance(left, Name) or left.primes:
        refuse(left, "not built in this version: a left side other than one signal.", "Write y = N(s)/D(s) * u.")
    with_s, rest = _split_sum(equation.right)
    top, bottom, drive = _split_product(with_s)
    numerator = _in_s(product_of(top), algebra) if top else {0: Polynomial.constant(1)}
    denominator = _in_s(product_of(bottom), algebra) if bottom else {0: Polynomial.constant(1)}
    order = max(denominator)
    if max(numerator) > order:
        refuse(
            with_s,
            f"The block is improper: degree {max(numerator)} over degree {order} would differentiate.",
            "Give the denominator at least the degree of the numerator.",
        )
    lead = _inverse(denominator[order], algebra)
    a = {k: value * lead for k, value in denominator.items()}
    b = {k: value * lead for k, value in numerator.items()}
    return _observer(left.name, order, a, b, algebra.polynomial(drive), algebra.polynomial(rest), taken)


def _observer(
    name: str, order: int, a: dict[int, Polynomial], b: dict[int, Polynomial], drive: Polynomial, rest: Polynomial,
    taken: frozenset[str],
) -> Realised:  # fmt: skip
    definitions: dict[Atom, Polynomial] = {}
    output = Atom(Kind.SIGNAL, name)
    if len(drive) > 1 or drive.degree > 1:
        inner = Atom(Kind.SIGNAL, _free(f"{name}_in", taken))
        definitions[inner] = drive
        drive = Polynomial.of(inner)
    direct = order in b or bool(rest.terms)
    states = [Atom(Kind.SIGNAL, _free(f"{name}_{k}", taken)) for k in range(1, order + 1)]
    if direct:
        through = b[order] * drive if order in b else Polynomial.constant(0)
        definitions[output] = Polynomial.of(states[-1]) + through + rest
        # The block's own output, without what is added behind it, feeds back.
        block_output = Polynomial.of(states[-1]) + through
    else:
        states[-1] = output
        block_output = Polynomial.of(output)
    rates = {}
    for k, state in enumerate(states):
        parts = [Polynomial.of(states[k - 1])] if k else []
        parts += [b[k] * drive] if k in b else []
        parts += [(a[k] * block_output).scaled(Fraction(-1))] if k in a else []
        rates[state] = Polynomial.sum(parts)
    return Realised(rates, definitions)


def _free(name: str, taken: frozenset[str]) -> str:
    while name in taken:
        name += "_"
    return name


def _has_s(node: Node) -> bool:
    return any(n.name == "s" for n in names_of(node))


def _nested(node: Node) -> NoReturn:
    refuse(
        node,
        "not built in this version: more than one block in s, or one inside another.",
        "Write one term N(s)/D(s) * u, or turn the other blocks into differential equations.",
    )


def _split_sum(node: Node) -> tuple[Node, Node]:
    """The one summand with s, and the sum of the others."""
    found: list[Node] = []
    others: Node = Number(Fraction(0))
    stack = [(node, 1)]
    while stack:
        top, sign = stack.pop()
        if isinstance(top, Binary) and top.operator in "+-":
            stack += [(top.left, sign), (top.right, sign if top.operator == "+" else -sign)]
        elif isinstance(top, Minus) and isinstance(top.operand, Binary) and top.operand.operator in "+-":
            stack.append((top.operand, -sign))
        elif _has_s(top):
            found.append(top if sign > 0 else Minus(top, top.origin))
        else:
            others = Binary("+" if sign > 0 else "-", others, top)
    if len(found) != 1:
        _nested(node)
    return found[0], others


def _split_product(node: Node) -> tuple[list[Node], list[Node], Node]:
    """Factors with s above and below the line, and the product of the rest."""
    top: list[Node] = []
    bottom: list[Node] = []
    drive: Node = Number(Fraction(1))
    stack = [(node, 1)]
    while stack:
        factor, power = stack.pop()
        if isinstance(factor, Minus) and _has_s(factor):
            drive = Minus(drive)
            stack.append((factor.operand, power))
        elif isinstance(factor, Binary) and factor.operator in "*/" and _has_s(factor):
            stack += [(factor.left, power), (factor.right, power if factor.operator == "*" else -power)]
        elif _has_s(factor):
            (top if power > 0 else bottom).append(factor)
        else:
            drive = Binary("*" if power > 0 else "/", drive, factor, factor.origin)
    return top, bottom, drive


def _in_s(node: Node, algebra: Algebra) -> dict[int, Polynomial]:
    """Coefficients of a polynomial in s, by power."""
    allowed = {"s", "pi", *algebra.fixed, *algebra.adjustable}
    for name in names_of(node):
        if name.name not in allowed or name.primes:
            _nested(node)
    inner = Algebra(
        algebra.fixed, algebra.adjustable, {}, frozenset(), {}, frozenset({"s"}), algebra.duration,
        algebra.functions, algebra.written,
    )  # fmt: skip
    made: dict[int, Polynomial] = {}
    try:
        whole = inner.polynomial(node)
    except ProblemFaults:
        _nested(node)
    for powers, value in whole.terms.items():
        power = dict(powers).get(_OPERATOR, 0)
        made[power] = made.get(power, Polynomial({})) + Polynomial({part(powers, Kind.PARAMETER): value})
    made = {k: v for k, v in made.items() if v.terms}
    if not made:
        refuse(node, "This polynomial in s is zero.", "Give it a coefficient.")
    return made


def _inverse(value: Polynomial, algebra: Algebra) -> Polynomial:
    if len(value) == 1:
        return value.inverse()
    return algebra.polynomial(Binary("/", Number(Fraction(1)), sum_tree(value, algebra.functions)))
