"""Expression trees: what a formula of the problem file says, with the place it came from."""

from __future__ import annotations

from dataclasses import dataclass, field
from fractions import Fraction
from typing import TypeAlias


@dataclass(frozen=True, slots=True)
class Origin:
    """Place of a piece of text in the problem file.

    Attributes
    ----------
    key
        Dotted TOML key of the string that holds it: ``equations[2]``, ``start.z'``, ``inputs.F``.
    start, end
        Character span inside that string, end exclusive.
    """

    key: str
    start: int
    end: int


@dataclass(frozen=True, slots=True)
class Number:
    """An exact literal: ``4.7k`` is 4700."""

    value: Fraction
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Name:
    """A name with its prime marks: ``z''`` is ``Name("z", 2)``."""

    name: str
    primes: int = 0
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Minus:
    """The negative of a subtree."""

    operand: Node
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Binary:
    """Two subtrees joined by one of ``+ - * / ^``."""

    operator: str
    left: Node
    right: Node
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Call:
    """A listed function of one or more subtrees."""

    function: str
    arguments: tuple[Node, ...]
    origin: Origin | None = field(default=None, compare=False)


Node: TypeAlias = Number | Name | Minus | Binary | Call

#: The closed list of functions and how many arguments each takes.
FUNCTIONS: dict[str, int] = {
    "sin": 1, "cos": 1, "tan": 1, "exp": 1, "log": 1, "sqrt": 1, "abs": 1, "sign": 1, "tanh": 1,
    "step": 1, "ramp": 1, "pulse": 3, "square": 2, "triangle": 2, "sawtooth": 2,
}  # fmt: skip

#: Functions of time that jump, or whose slope jumps.
PIECEWISE = frozenset({"step", "ramp", "pulse", "square", "triangle", "sawtooth", "abs", "sign"})

_PRECEDENCE = {"+": 1, "-": 1, "*": 2, "/": 2, "^": 4}


def text_of(node: Node, outer: int = 0) -> str:
    """Canonical text of a tree; equal trees give equal text.

    Parameters
    ----------
    node
        The tree.
    outer
        Binding strength of what stands around it; weaker trees get parentheses.
    """
    if isinstance(node, Number):
        text = _number_text(node.value)
        return f"({text})" if ("/" in text and outer >= 2) or (text.startswith("-") and outer) else text
    if isinstance(node, Name):
        return node.name + "'" * node.primes
    if isinstance(node, Call):
        return f"{node.function}({', '.join(text_of(a) for a in node.arguments)})"
    if isinstance(node, Minus):
        text = "-" + text_of(node.operand, 3)
        return f"({text})" if outer >= 1 else text
    strength = _PRECEDENCE[node.operator]
    left = text_of(node.left, strength + (node.operator == "^"))
    right = text_of(node.right, strength + (node.operator in "-/"))
    blank = " " if strength == 1 else ""
    text = f"{left}{blank}{node.operator}{blank}{right}"
    return f"({text})" if strength < outer else text


def _number_text(value: Fraction) -> str:
    if value.denominator == 1:
        return str(value.numerator)
    as_float = repr(float(value))
    return as_float if Fraction(as_float) == value else str(value)
