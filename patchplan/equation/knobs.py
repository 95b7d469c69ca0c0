"""Functions of adjustable parameters that multiply terms, and their range over the box of the parameters."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from itertools import product

import numpy as np

from patchplan.equation.algebra import Algebra
from patchplan.equation.constants import constant_value, names_of
from patchplan.equation.formula import sum_tree
from patchplan.equation.polynomial import Atom, Polynomial, Powers
from patchplan.equation.problem import Parameter
from patchplan.equation.system import Knob
from patchplan.equation.tree import Binary, Call, Minus, Node, Number, text_of
from patchplan.equation.waveform import Array, numeric_names
from patchplan.errors import Fault, ProblemFaults

#: Samples along each parameter, by the number of parameters of a knob.
_SAMPLES = {1: 257, 2: 33, 3: 13}


@dataclass
class Knobs:
    """Knobs met so far, by name."""

    algebra: Algebra
    parameters: Mapping[str, Parameter]
    made: dict[str, Knob] = field(default_factory=dict)

    def terms(self, coefficients: Mapping[Powers, Fraction]) -> list[tuple[Fraction, tuple[str, ...]]]:
        """Write a coefficient as a sum of numbers times knobs; no parameter stands in two different knobs of it.

        Parameters
        ----------
        coefficients
            A polynomial of atoms of kind PARAMETER.
        """
        found = []
        for group in self._groups(list(coefficients)):
            if len(group) == 1 and self._separable(group[0]):
                names = [self._knob(Polynomial({((atom, power),): Fraction(1)})) for atom, power in group[0]]
                found.append((coefficients[group[0]], tuple(sorted(names))))
                continue
            first = coefficients[group[0]]
            whole = Polynomial({powers: coefficients[powers] / first for powers in group})
            found.append((first, (self._knob(whole),)))
        return found

    def _uses(self, powers: Powers) -> dict[str, tuple[tuple[Atom, int], ...]]:
        """Parameter -> the factors that it stands in."""
        uses: dict[str, tuple[tuple[Atom, int], ...]] = {}
        for factor in powers:
            for name in sorted({n.name for n in names_of(self.algebra.functions[factor[0]])}):
                if name in self.algebra.adjustable:
                    uses[name] = (*uses.get(name, ()), factor)
        return uses

    def _separable(self, powers: Powers) -> bool:
        return all(len(factors) == 1 for factors in self._uses(powers).values())

    def _groups(self, monomials: Sequence[Powers]) -> list[list[Powers]]:
        """Join products in which the same parameter stands in different functions."""
        groups: list[list[Powers]] = []
        for powers in monomials:
            uses = self._uses(powers)
            joined, apart = [powers], []
            for group in groups:
                clash = any(
                    uses.get(name, factors) != factors for other in group for name, factors in self._uses(other).items()
                )
                if clash:
                    joined = group + joined
                else:
                    apart.append(group)
            groups = [*apart, joined]
        return groups

    def _knob(self, value: Polynomial) -> str:
        tree = sum_tree(value, self.algebra.functions)
        name = text_of(sum_tree(value, self.algebra.written, rounded=True))
        if name not in self.made:
            names = tuple(sorted({n.name for n in names_of(tree)} & self.algebra.adjustable))
            self.made[name] = _ranged(name, tree, [self.parameters[n] for n in names])
        return name


def _ranged(name: str, tree: Node, parameters: Sequence[Parameter]) -> Knob:
    names = tuple(p.name for p in parameters)
    nominal = constant_value(tree, {p.name: p.value for p in parameters})
    grid = _grid(parameters)
    _refuse_pole(name, tree, grid, parameters)
    values = np.broadcast_to(numeric_names(tree, grid), (_SAMPLES.get(len(names), 5),) * len(names)).ravel()
    if not np.all(np.isfinite(values)):
        raise ProblemFaults([_pole(name, parameters[0])])
    corners = [
        constant_value(tree, dict(zip(names, corner, strict=True)))
        for corner in product(*((p.low or Fraction(0), p.high or Fraction(0)) for p in parameters))
    ]
    low, high = min(corners), max(corners)
    # Corners are exact; an inner extreme, which only a function that is not monotone has, comes from the samples.
    slack = 1e-12 * max(abs(float(low)), abs(float(high)))
    if values.min() < float(low) - slack:
        low = Fraction(_polished(tree, parameters, values, sign=1))
    if values.max() > float(high) + slack:
        high = Fraction(_polished(tree, parameters, values, sign=-1))
    return Knob(name, tree, names, nominal, low, high)


def _grid(parameters: Sequence[Parameter]) -> dict[str, Array]:
    count = _SAMPLES.get(len(parameters), 5)
    axes = [np.linspace(float(p.low or 0), float(p.high or 0), count) for p in parameters]
    return dict(zip((p.name for p in parameters), np.meshgrid(*axes, indexing="ij"), strict=True))


def _polished(tree: Node, parameters: Sequence[Parameter], values: Array, *, sign: int) -> float:
    """Extreme inside the box, from the best sample on."""
    from scipy.optimize import minimize

    grid = _grid(parameters)
    best = int(np.argmin(sign * values))
    start = [float(grid[p.name].ravel()[best]) for p in parameters]
    bounds = [(float(p.low or 0), float(p.high or 0)) for p in parameters]

    def height(x: Array) -> float:
        return sign * float(numeric_names(tree, dict(zip((p.name for p in parameters), map(float, x), strict=True))))

    found = minimize(height, start, bounds=bounds)
    return sign * float(min(found.fun, sign * values[best]))


def _refuse_pole(name: str, tree: Node, grid: Mapping[str, Array], parameters: Sequence[Parameter]) -> None:
    for divisor in divisors(tree):
        values = numeric_names(divisor, dict(grid))
        if np.nanmin(values) <= 0.0 <= np.nanmax(values):
            raise ProblemFaults([_pole(name, parameters[0])])


def _pole(name: str, parameter: Parameter) -> Fault:
    return Fault(
        f"Inside the range of {parameter.name} the coefficient {name} has no finite value.",
        "Narrow the range so that it stays clear of that place.", f"parameters.{parameter.name}",
    )  # fmt: skip


def divisors(tree: Node) -> list[Node]:
    """Every part of a tree that must not be zero."""
    found: list[Node] = []
    stack = [tree]
    while stack:
        node = stack.pop()
        if isinstance(node, Minus):
            stack.append(node.operand)
        elif isinstance(node, Call):
            stack += node.arguments
            if node.function == "tan":
                found.append(Call("cos", node.arguments))
        elif isinstance(node, Binary):
            stack += [node.left, node.right]
            if node.operator == "/" and not isinstance(node.right, Number):
                found.append(node.right)
            elif node.operator == "^" and isinstance(node.right, Minus | Number) and _negative(node.right):
                found.append(node.left)
    return found


def _negative(node: Node) -> bool:
    return isinstance(node, Minus) or (isinstance(node, Number) and node.value < 0)
