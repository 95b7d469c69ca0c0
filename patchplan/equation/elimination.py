"""Small sparse linear systems, solved exactly."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from typing import Any

from patchplan.equation.algebra import Algebra
from patchplan.equation.formula import sum_tree
from patchplan.equation.polynomial import Atom, Kind, Polynomial, TooLargeError
from patchplan.equation.tree import Binary, Call, Minus, Name, Node, Number, text_of

#: Row of a sparse matrix: column -> entry.
Sparse = dict[int, Polynomial]


#: Equations times parameters of a mass matrix; beyond, its rational functions grow past all use.
_MOST_SYMBOLIC = 30


class SingularError(Exception):
    """The matrix has no inverse; ``column`` is an unknown that it leaves open."""

    def __init__(self, column: int) -> None:
        self.column = column
        super().__init__(column)


def inverse(matrix: Sequence[Sparse], algebra: Algebra) -> list[Sparse]:
    """Inverse of a square matrix whose entries are numbers or rational in adjustable parameters.

    Parameters
    ----------
    matrix
        One row per equation.

    Returns
    -------
    list of Sparse
        One row per unknown; columns are equations.

    Raises
    ------
    SingularError
        Where a pivot is zero (identically, where parameters stand in it).
    TooLargeError
        Where too many coupled equations hold adjustable parameters.
    """
    if all(entry.value is not None for row in matrix for entry in row.values()):
        numbers = [{j: entry.value for j, entry in row.items()} for row in matrix]
        return [{i: Polynomial.constant(x) for i, x in row.items()} for row in _gauss_jordan(numbers, Fraction(1))]
    if len(matrix) == 1 and len(matrix[0]) == 1 and len(matrix[0][0]) == 1:
        return [{0: matrix[0][0].inverse()}]
    return _with_parameters(matrix, algebra)


def _gauss_jordan(rows: Sequence[dict[int, Any]], one: Any) -> list[dict[int, Any]]:
    """Rows of the inverse; entries of any field."""
    left = [dict(row) for row in rows]
    right: list[dict[int, Any]] = [{i: one} for i in range(len(rows))]
    open_rows = set(range(len(rows)))
    owner: dict[int, int] = {}
    for column in range(len(rows)):
        having = [i for i in sorted(open_rows) if left[i].get(column)]
        if not having:
            raise SingularError(column)
        pivot = min(having, key=lambda i: len(left[i]))
        open_rows.remove(pivot)
        owner[column] = pivot
        factor = one / left[pivot][column]
        left[pivot] = {j: x * factor for j, x in left[pivot].items()}
        right[pivot] = {j: x * factor for j, x in right[pivot].items()}
        for i in range(len(rows)):
            if i != pivot and left[i].get(column):
                factor = left[i][column]
                _subtract(left[i], left[pivot], factor)
                _subtract(right[i], right[pivot], factor)
    return [right[owner[column]] for column in range(len(rows))]


def _subtract(row: dict[int, Any], other: dict[int, Any], factor: Any) -> None:
    for j, x in other.items():
        value = row[j] - x * factor if j in row else -x * factor
        if value:
            row[j] = value
        else:
            row.pop(j, None)


def _with_parameters(matrix: Sequence[Sparse], algebra: Algebra) -> list[Sparse]:
    # Rational functions of the parameters are cancelled by sympy, on these coefficients alone.
    from sympy import QQ, field

    atoms = sorted({a for row in matrix for entry in row.values() for a in entry.atoms()})
    letters = sorted({x for a in atoms for x in _letters(algebra.functions[a])})
    if len(matrix) * len(letters) > _MOST_SYMBOLIC:
        raise TooLargeError
    texts = {x: f"p{i}" for i, x in enumerate(letters)}
    made = field(list(texts.values()), QQ)
    known = dict(zip(letters, made[1:], strict=True))
    one = made[0].one

    def entry_of(entry: Polynomial) -> Any:
        total = made[0].zero
        for powers, value in entry.terms.items():
            part = one * QQ(value.numerator, value.denominator)
            for atom, power in powers:
                part *= _element(algebra.functions[atom], known, one) ** power
            total += part
        return total

    rows = [{j: entry_of(entry) for j, entry in row.items()} for row in matrix]
    trees = {x: _tree_of(x, algebra) for x in letters}
    return [{i: _back(x, letters, trees, algebra) for i, x in row.items()} for row in _gauss_jordan(rows, one)]


def _letters(node: Node) -> set[str]:
    """Parameters and functions of them that stand in a rational function."""
    if isinstance(node, Number):
        return set()
    if isinstance(node, Minus):
        return _letters(node.operand)
    if isinstance(node, Binary) and (node.operator != "^" or _whole(node.right) is not None):
        return _letters(node.left) | _letters(node.right)
    return {text_of(node)}


def _whole(node: Node) -> int | None:
    sign = 1
    while isinstance(node, Minus):
        node, sign = node.operand, -sign
    return sign * int(node.value) if isinstance(node, Number) and node.value.denominator == 1 else None


def _element(node: Node, known: dict[str, Any], one: Any) -> Any:
    if isinstance(node, Number):
        return one * node.value.numerator / node.value.denominator
    if isinstance(node, Minus):
        return -_element(node.operand, known, one)
    if isinstance(node, Name | Call) or text_of(node) in known:
        return known[text_of(node)]
    left = _element(node.left, known, one)
    if node.operator == "^":
        return left ** (_whole(node.right) or 0)
    right = _element(node.right, known, one)
    if node.operator == "+":
        return left + right
    if node.operator == "-":
        return left - right
    return left * right if node.operator == "*" else left / right


def _tree_of(letter: str, algebra: Algebra) -> Node:
    if letter in algebra.adjustable:
        return Name(letter)
    return algebra.functions[Atom(Kind.PARAMETER, letter)]


def _back(value: Any, letters: Sequence[str], trees: dict[str, Node], algebra: Algebra) -> Polynomial:
    """Polynomial of a rational function: its numerator over a product of parameters and at most one sum."""
    top = _terms(value.numer, letters)
    bottom = _terms(value.denom, letters)
    common = {a: min(dict(p).get(a, 0) for p in bottom.terms) for p in bottom.terms for a, _ in p}
    shared = Polynomial({tuple(sorted((a, n) for a, n in common.items() if n)): Fraction(1)})
    rest = bottom * shared.inverse()
    for letter in letters:
        atom = Atom(Kind.PARAMETER, letter)
        algebra.functions.setdefault(atom, trees[letter])
        algebra.written.setdefault(atom, trees[letter])
    result = top * shared.inverse()
    if rest.value is not None:
        return result.scaled(1 / rest.value)
    first = next(iter(rest.terms.values()))
    over = algebra.polynomial(Binary("/", Number(Fraction(1)), sum_tree(rest.scaled(1 / first), algebra.functions)))
    return result.scaled(1 / first) * over


def _terms(poly: Any, letters: Sequence[str]) -> Polynomial:
    terms = {
        tuple((Atom(Kind.PARAMETER, x), n) for x, n in zip(letters, powers, strict=True) if n): Fraction(
            int(value.numerator), int(value.denominator)
        )
        for powers, value in poly.terms()
    }
    return Polynomial(terms)
