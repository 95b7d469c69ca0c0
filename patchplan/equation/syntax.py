"""Formulas to trees: a precedence parser that nothing but our own code ever evaluates."""

from __future__ import annotations

import re
from collections.abc import Collection
from difflib import get_close_matches
from fractions import Fraction
from math import comb

from patchplan.equation.constants import constant_value, is_constant
from patchplan.equation.problem import Equation
from patchplan.equation.tokens import Token, refuse, tokenise
from patchplan.equation.tree import FUNCTIONS, Binary, Call, Minus, Name, Node, Number, Origin

#: Deepest tree and largest expanded polynomial that later stages must be able to walk.
MAX_DEPTH = 200
MAX_RECURSION = 50
MAX_NODES = 2000
MAX_DEGREE = 40
MAX_TERMS = 2000

_STARTS_OPERAND = frozenset({"number", "name", "("})


def parse_expression(text: str, key: str = "", *, names: Collection[str] = ()) -> Node:
    """Tree of a formula.

    Parameters
    ----------
    text
        The formula.
    key
        Dotted TOML key of its string, kept in every origin.
    names
        Names of the file; a number's suffix letter among them is refused.

    Raises
    ------
    ProblemFaults
        With the first fault of the formula.
    """
    tokens = tokenise(text, key, names)
    for token in tokens:
        if token.kind == "=":
            refuse('A formula holds no "=".', "Write the right side alone.", key, token.start, token.end)
    return _Parser(tokens, key).whole()


def parse_equation(text: str, index: int, *, names: Collection[str] = ()) -> Equation:
    """One line of ``equations``, split at its single ``=``.

    Raises
    ------
    ProblemFaults
        With the first fault of the line.
    """
    key = f"equations[{index}]"
    tokens = tokenise(text, key, names)
    signs = [i for i, token in enumerate(tokens) if token.kind == "="]
    if not signs:
        refuse('The equation has no "=".', "Write left side = right side.", key, 0, len(text))
    if len(signs) > 1:
        second = tokens[signs[1]]
        refuse('The equation has a second "=".', "Write one equation a string.", key, second.start, second.end)
    cut = tokens[signs[0]]
    left = _Parser([*tokens[: signs[0]], Token("end", "", cut.start, cut.start)], key).whole()
    right = _Parser(tokens[signs[0] + 1 :], key).whole()
    if isinstance(left, Name) and left.name in {"t", "pi"}:
        _taken(left.name, key, left.origin)
    return Equation(index, left, right, " ".join(re.split(r"[\t\r\n]", text)))


def _taken(name: str, key: str, origin: Origin | None) -> None:
    start, end = (origin.start, origin.end) if origin else (0, 0)
    what = "the time" if name == "t" else "the number 3.14159..."
    refuse(f'"{name}" is {what} and cannot be defined.', "Give the signal another name.", key, start, end)


class _Parser:
    """Recursive descent over one list of tokens; every recursion is counted."""

    def __init__(self, tokens: list[Token], key: str) -> None:
        self.tokens = tokens
        self.key = key
        self.at = 0
        self.recursion = 0
        self.nodes = 0
        self.depths: dict[int, int] = {}

    def whole(self) -> Node:
        tree = self.sum()
        if self.token.kind != "end":
            self.unexpected()
        check_growth(tree, self.key)
        return tree

    @property
    def token(self) -> Token:
        return self.tokens[self.at]

    def take(self) -> Token:
        self.at += 1
        return self.tokens[self.at - 1]

    def origin(self, start: int) -> Origin:
        return Origin(self.key, start, self.tokens[self.at - 1].end)

    def made(self, node: Node, *parts: Node) -> Node:
        self.nodes += 1
        depth = 1 + max((self.depths[id(part)] for part in parts), default=0)
        self.depths[id(node)] = depth
        if self.nodes > MAX_NODES or depth > MAX_DEPTH:
            self.refuse(
                f"The formula has over {MAX_NODES} parts or a chain of over {MAX_DEPTH}.",
                "Split it with definitions.", self.tokens[self.at - 1],
            )  # fmt: skip
        return node

    def refuse(self, found: str, remedy: str, token: Token) -> None:
        refuse(found, remedy, self.key, token.start, token.end)

    def unexpected(self) -> None:
        token = self.token
        if token.kind == "end":
            wanted = "Write a number, a name or a formula in parentheses here."
            refuse("The formula ends where a value is wanted.", wanted, self.key, max(token.start - 1, 0), token.end)
        before = self.tokens[self.at - 1].text if self.at else ""
        if self.at and token.kind in _STARTS_OPERAND and (before == ")" or before[-1].isalnum() or before[-1] in "_'"):
            self.refuse(f'"{token.text}" follows "{before}" without a sign.', "Write * for a product.", token)
        self.refuse(f'"{token.text}" stands where a value is wanted.', "Write a number, a name or ( here.", token)

    def sum(self) -> Node:
        return self.chain(("+", "-"))

    def product(self) -> Node:
        return self.chain(("*", "/"))

    def chain(self, operators: tuple[str, str]) -> Node:
        """Left-binding chain of one precedence."""
        operand = self.product if operators[0] == "+" else self.unary
        start = self.token.start
        left = operand()
        while self.token.kind in operators:
            operator = self.take().kind
            right = operand()
            left = self.made(Binary(operator, left, right, self.origin(start)), left, right)
        return left

    def unary(self) -> Node:
        self.recursion += 1
        if self.recursion > MAX_RECURSION:
            self.refuse(f"Signs, powers or parentheses are nested deeper than {MAX_RECURSION}.",
                        "Split the formula with definitions.", self.token)  # fmt: skip
        tree = self.signed()
        self.recursion -= 1
        return tree

    def signed(self) -> Node:
        start = self.token.start
        if self.token.kind == "+":
            self.take()
            return self.unary()
        if self.token.kind == "-":
            self.take()
            operand = self.unary()
            return self.made(Minus(operand, self.origin(start)), operand)
        base = self.primary()
        if self.token.kind != "^":
            return base
        self.take()
        exponent = self.unary()
        return self.made(Binary("^", base, exponent, self.origin(start)), base, exponent)

    def primary(self) -> Node:
        token = self.token
        if token.kind == "number":
            self.take()
            return self.made(Number(token.value, self.origin(token.start)))
        if token.kind == "name":
            return self.name()
        if token.kind != "(":
            self.unexpected()
        self.take()
        inside = self.sum()
        if self.token.kind != ")":
            self.unexpected()
        self.take()
        return inside

    def name(self) -> Node:
        token = self.take()
        called = self.token.kind == "("
        if token.text in FUNCTIONS and not token.primes:
            if called:
                return self.call(token)
            self.refuse(f'"{token.text}" is a function and cannot name a signal.',
                        f"Write {token.text}(...) with its argument, or another name.", token)  # fmt: skip
        if token.primes and (token.text in FUNCTIONS or token.text in {"t", "pi"}):
            self.refuse(f'"{token.text}" is taken and has no derivative.', "Give the signal another name.", token)
        if called:
            self.no_function(token)
        return self.made(Name(token.text, token.primes, self.origin(token.start)))

    def no_function(self, token: Token) -> None:
        near = get_close_matches(token.text, FUNCTIONS, 1)
        guess = f"Did you mean {near[0]}? " if near else ""
        written = token.text + "'" * token.primes
        self.refuse(f'"{written}" is no function.', f"{guess}Write {written}*(...) for a product; functions are "
                    f"{', '.join(FUNCTIONS)}.", token)  # fmt: skip

    def call(self, name: Token) -> Node:
        self.take()
        arguments = [self.sum()] if self.token.kind != ")" else []
        while self.token.kind == ",":
            self.take()
            arguments.append(self.sum())
        if self.token.kind != ")":
            self.unexpected()
        self.take()
        wanted = FUNCTIONS[name.text]
        if len(arguments) != wanted:
            refuse(
                f'"{name.text}" takes {wanted} argument{"s" * (wanted > 1)}, here are {len(arguments)}.',
                f"Write {name.text}({', '.join(_ARGUMENTS.get(name.text, ('x',)))}).",
                self.key, name.start, self.tokens[self.at - 1].end,
            )  # fmt: skip
        return self.made(Call(name.text, tuple(arguments), self.origin(name.start)), *arguments)


_ARGUMENTS = {
    "pulse": ("t", "start", "width"), "square": ("t", "period"), "triangle": ("t", "period"),
    "sawtooth": ("t", "period"),
}  # fmt: skip


def check_growth(tree: Node, key: str) -> tuple[int, int]:
    """Bounds on the degree and the number of terms of the expanded tree.

    Raises
    ------
    ProblemFaults
        Where a bound is passed, or a constant power or quotient has no usual value.
    """
    if isinstance(tree, Number):
        return 0, 1
    if isinstance(tree, Name):
        return int(tree.name != "pi"), 1
    if isinstance(tree, Minus):
        return check_growth(tree.operand, key)
    if isinstance(tree, Call):
        for argument in tree.arguments:
            check_growth(argument, key)
        return 1, 1
    (left_degree, left_terms), (right_degree, right_terms) = check_growth(tree.left, key), check_growth(tree.right, key)
    degree, terms = max(left_degree, right_degree), left_terms + right_terms
    if tree.operator in "*/":
        degree, terms = left_degree + right_degree, left_terms * right_terms
    if tree.operator in "/^" and is_constant(tree.right):
        degree, terms = _constant_right(tree, degree, terms, left_degree, left_terms)
    if degree > MAX_DEGREE or terms > MAX_TERMS:
        start, end = (tree.origin.start, tree.origin.end) if tree.origin else (0, 0)
        size = f"degree {degree}" if MAX_DEGREE < degree <= 10**6 else f"up to {terms} terms"
        size = "a degree over a million" if degree > 10**6 else size
        refuse(
            f"Multiplied out this has {size}; degree {MAX_DEGREE} and {MAX_TERMS} terms are allowed.",
            "Use a lower power or fewer terms.", key, start, end,
        )  # fmt: skip
    return degree, terms


def _constant_right(tree: Binary, degree: int, terms: int, base_degree: int, base_terms: int) -> tuple[int, int]:
    """Bounds of a quotient by, or a power to, a constant."""
    if is_constant(tree.left):
        constant_value(tree, {})
        return 0, 1
    if tree.operator == "/":
        constant_value(Binary("/", Number(Fraction(1)), tree.right, tree.origin), {})
        return degree, terms
    power = constant_value(tree.right, {})
    count = abs(int(power))
    if base_terms == 1 or count > MAX_DEGREE:
        return base_degree * count, 1
    return base_degree * count, comb(base_terms + count - 1, count)
