"""Exact values of formulas of numbers and parameters."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from fractions import Fraction

from patchplan.equation.tree import Binary, Call, Minus, Name, Node, Number
from patchplan.errors import Fault, ProblemFaults

#: Fifty digits, so that sin(pi) and cos(pi/2) reduce to exact values.
PI = Fraction("3.14159265358979323846264338327950288419716939937511")

#: Largest numerator or denominator [bits], and the magnitudes a later float can hold.
MAX_BITS = 4096
_LARGEST = Fraction(10) ** 300

#: Functions of constants; the others are functions of time.
_FLOAT: dict[str, Callable[[float], float]] = {"exp": math.exp, "log": math.log, "tanh": math.tanh}
_TRIGONOMETRIC = ("sin", "cos", "tan")
_CONSTANT = frozenset({*_FLOAT, *_TRIGONOMETRIC, "sqrt", "abs", "sign"})


def is_constant(tree: Node) -> bool:
    """Whether a tree holds no name but pi and no function of time."""
    if isinstance(tree, Name):
        return tree.name == "pi"
    if isinstance(tree, Binary):
        return is_constant(tree.left) and is_constant(tree.right)
    if isinstance(tree, Call):
        return tree.function in _CONSTANT and all(map(is_constant, tree.arguments))
    return isinstance(tree, Number) or is_constant(tree.operand)


def names_of(tree: Node) -> list[Name]:
    """Every name of a tree, left to right."""
    if isinstance(tree, Name):
        return [tree]
    if isinstance(tree, Binary):
        return names_of(tree.left) + names_of(tree.right)
    if isinstance(tree, Call):
        return [name for argument in tree.arguments for name in names_of(argument)]
    return names_of(tree.operand) if isinstance(tree, Minus) else []


def constant_value(tree: Node, parameters: Mapping[str, Fraction]) -> Fraction:
    """Value of a formula of numbers, pi and parameters.

    Rational arithmetic and roots of perfect squares are exact; irrational values are the nearest float.

    Raises
    ------
    ProblemFaults
        With one fault at the part that has no usual value.
    """
    try:
        value = _value(tree, parameters)
    except ArithmeticError as error:
        raise ProblemFaults([_fault(tree, str(error), "Write numbers of usual size.")]) from None
    magnitude = abs(value)
    if max(value.numerator.bit_length(), value.denominator.bit_length()) > MAX_BITS or (
        value and not 1 / _LARGEST < magnitude < _LARGEST
    ):
        raise ProblemFaults([_fault(tree, "This number is too large or too small.", "Write numbers of usual size.")])
    return value


def _fault(tree: Node, found: str, remedy: str) -> Fault:
    if tree.origin is None:
        return Fault(found, remedy)
    return Fault(found, remedy, tree.origin.key, (tree.origin.start, tree.origin.end))


def _value(tree: Node, parameters: Mapping[str, Fraction]) -> Fraction:
    if isinstance(tree, Number):
        return Fraction(tree.value)
    if isinstance(tree, Name):
        return _named(tree, parameters)
    if isinstance(tree, Minus):
        return -constant_value(tree.operand, parameters)
    if isinstance(tree, Call):
        return _called(tree, [constant_value(a, parameters) for a in tree.arguments])
    left, right = constant_value(tree.left, parameters), constant_value(tree.right, parameters)
    if tree.operator == "+":
        return left + right
    if tree.operator == "-":
        return left - right
    if tree.operator == "*":
        return left * right
    if tree.operator == "/":
        if right == 0:
            raise ProblemFaults([_fault(tree.right, "This divides by zero.", "Give the divisor another value.")])
        return left / right
    return _power(left, right)


def _named(tree: Name, parameters: Mapping[str, Fraction]) -> Fraction:
    if tree.name == "pi" and not tree.primes:
        return PI
    if tree.name in parameters and not tree.primes:
        return parameters[tree.name]
    written = tree.name + "'" * tree.primes
    raise ProblemFaults([_fault(tree, f'"{written}" is no parameter.', "Use numbers, pi and parameters.")])


def _power(base: Fraction, exponent: Fraction) -> Fraction:
    if base == 0 and exponent < 0:
        raise ArithmeticError("This is zero to a negative power.")
    if exponent.denominator == 1:
        bits = max(base.numerator.bit_length(), base.denominator.bit_length())
        if bits > 1 and abs(exponent.numerator) * (bits - 1) > MAX_BITS:
            raise ArithmeticError("This power is too large.")
        return base ** (exponent.numerator if abs(base) != 1 else exponent.numerator % 2)
    if base < 0:
        raise ArithmeticError("This is a broken power of a negative number.")
    if exponent.denominator == 2:
        return _power(_root(base), Fraction(exponent.numerator))
    return _finite(lambda: math.pow(float(base), float(exponent)))


def _root(value: Fraction) -> Fraction:
    if value < 0:
        raise ArithmeticError("This is the root of a negative number.")
    above, below = math.isqrt(value.numerator), math.isqrt(value.denominator)
    if above**2 == value.numerator and below**2 == value.denominator:
        return Fraction(above, below)
    return _finite(lambda: math.sqrt(float(value)))


def _finite(compute: Callable[[], float]) -> Fraction:
    try:
        return Fraction(compute())
    except (ValueError, OverflowError):
        raise ArithmeticError("This has no finite value.") from None


def _called(tree: Call, arguments: list[Fraction]) -> Fraction:
    if tree.function not in _CONSTANT:
        raise ProblemFaults(
            [_fault(tree, f'"{tree.function}" is a function of time.', "Use it in inputs and equations only.")]
        )
    (value,) = arguments
    if tree.function == "abs":
        return abs(value)
    if tree.function == "sign":
        return Fraction((value > 0) - (value < 0))
    if tree.function == "sqrt":
        return _root(value)
    if tree.function in _TRIGONOMETRIC:
        return _turned(tree.function, value)
    if tree.function == "log" and value <= 0:
        raise ProblemFaults([_fault(tree, "This is the logarithm of zero or less.", "Give it a positive argument.")])
    return _finite(lambda: _FLOAT[tree.function](float(value)))


def _turned(function: str, angle: Fraction) -> Fraction:
    """Sine, cosine or tangent, after taking whole quarter turns off exactly."""
    quarters = round(angle / (PI / 2))
    rest = float(angle - quarters * PI / 2)
    sine, cosine = Fraction(math.sin(rest)), Fraction(math.cos(rest))
    turned = [(sine, cosine), (cosine, -sine), (-sine, -cosine), (-cosine, sine)][quarters % 4]
    if function == "tan":
        if turned[1] == 0:
            raise ArithmeticError("This tangent has no finite value.")
        return turned[0] / turned[1]
    return turned[0] if function == "sin" else turned[1]
