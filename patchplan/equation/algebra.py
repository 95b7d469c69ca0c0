"""Expression trees to polynomials, with a sentence for everything that is no polynomial in the signals."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import NoReturn

import numpy as np

from patchplan.equation.constants import PI, constant_value, names_of
from patchplan.equation.formula import factors_of, product_of, refuse, sum_tree, tree_derivative
from patchplan.equation.polynomial import HIGHEST_DEGREE, MOST_TERMS, Atom, Kind, Polynomial, TooLargeError
from patchplan.equation.tree import Binary, Call, Minus, Name, Node, Number, text_of
from patchplan.equation.waveform import line_of, numeric_tree
from patchplan.errors import Fault, ProblemFaults

_NOT_BUILT = "not built in this version"
_TIMED = frozenset({"step", "ramp", "pulse", "square", "triangle", "sawtooth"})
_SIGNALS = {Kind.SIGNAL, Kind.RATE, Kind.SOURCE}


@dataclass
class Algebra:
    """What the names of a problem stand for, and the functions met so far.

    Attributes
    ----------
    fixed
        Numbers: fixed parameters, and inputs that are constant.
    adjustable
        Names of parameters with a knob.
    formulas
        Signals that are functions of time alone: their trees.
    named
        Formulas that keep their own name as a source (inputs).
    sources
        Inputs that arrive as they are, with the reason in words.
    signals
        Unknowns and definitions.
    functions
        Tree of every atom of kind PARAMETER and TIME, all names but ``t`` and adjustable ones turned into numbers.
    written
        The same tree as the file writes it, for names of sources.
    divisors
        Functions of time that something is divided by.
    """

    fixed: Mapping[str, Fraction]
    adjustable: frozenset[str]
    formulas: dict[str, Node]
    named: frozenset[str]
    sources: Mapping[str, str]
    signals: frozenset[str]
    duration: Fraction
    functions: dict[Atom, Node] = field(default_factory=dict)
    written: dict[Atom, Node] = field(default_factory=dict)
    divisors: list[Node] = field(default_factory=list)
    _known: dict[int, tuple[Node, Polynomial]] = field(default_factory=dict)

    def polynomial(self, node: Node) -> Polynomial:
        """Polynomial of a tree.

        Raises
        ------
        ProblemFaults
            With one fault: a quotient, root or function of signals, an expansion that is too large.
        """
        # Deep powers and calls look at their parts more than once; without a memory that doubles at every level.
        known = self._known.get(id(node))
        if known is not None:
            return known[1]
        try:
            made = self._polynomial(node)
        except TooLargeError:
            refuse(
                node,
                f"Multiplied out, this has over {MOST_TERMS} terms or a degree over {HIGHEST_DEGREE}.",
                "Use a lower power, or name parts of it in definitions.",
            )
        made = made if _is_sum(node) else made.placed(node.origin)
        self._known[id(node)] = node, made
        return made

    def forget(self) -> None:
        """Drop all that was worked out, after a change of what names stand for."""
        self.functions.clear()
        self.written.clear()
        self.divisors.clear()
        self._known.clear()

    def _polynomial(self, node: Node) -> Polynomial:
        if isinstance(node, Number):
            return Polynomial.constant(node.value, node.origin)
        if isinstance(node, Name):
            return self._name(node)
        if isinstance(node, Minus):
            return self.polynomial(node.operand).scaled(Fraction(-1))
        if isinstance(node, Call):
            return self._call(node)
        if node.operator in "+-":
            return Polynomial.sum(self._summands(node))
        return {"*": self._product, "/": self._quotient, "^": self._power}[node.operator](node)

    def _summands(self, node: Binary) -> list[Polynomial]:
        """Polynomials of all summands; faults of all of them are told at once."""
        signed: list[tuple[Node, int]] = []
        rest: Node = node
        while isinstance(rest, Binary) and rest.operator in "+-":
            signed.append((rest.right, 1 if rest.operator == "+" else -1))
            rest = rest.left
        parts: list[Polynomial] = []
        faults: list[Fault] = []
        for part, sign in [(rest, 1), *reversed(signed)]:
            try:
                parts.append(self.polynomial(part).scaled(Fraction(sign)))
            except ProblemFaults as error:
                faults += error.faults
        if faults:
            raise ProblemFaults(faults)
        return parts

    def _name(self, node: Name) -> Polynomial:
        name, primes = node.name, node.primes
        if name == "pi":
            return Polynomial.constant(PI)
        if name in self.fixed:
            return Polynomial.constant(self.fixed[name] if not primes else 0)
        if name in self.adjustable:
            return Polynomial.of(self._register(Kind.PARAMETER, node, node))
        if name == "t":
            return Polynomial.of(self._register(Kind.TIME, node, node))
        if name in self.signals:
            return Polynomial.of(Atom(Kind.SIGNAL, name, primes), 1, node.origin)
        if primes and (name in self.sources or name in self.named):
            return Polynomial.of(Atom(Kind.RATE, name, primes), 1, node.origin)
        if name in self.sources:
            return Polynomial.of(Atom(Kind.SOURCE, name), 1, node.origin)
        if name in self.named:
            atom = Atom(Kind.TIME, name)
            self.functions[atom], self.written[atom] = self.folded(self.formulas[name]), Name(name)
            return Polynomial.of(atom, 1, node.origin)
        tree = self.folded(self.formulas[name]) if primes else self.formulas[name]
        for _ in range(primes):
            tree = tree_derivative(tree)
        return self.polynomial(tree)

    def _product(self, node: Binary) -> Polynomial:
        factors = factors_of(node)
        values = [self.polynomial(x) for x in factors]
        timed = [i for i, v in enumerate(values) if v.kinds() == {Kind.TIME}]
        result = Polynomial.constant(1)
        if len(timed) > 1 and any(len(values[i]) > 1 for i in timed):
            # A product of sums of time functions is one function of time; expanded it would be many.
            result = self._function(Kind.TIME, product_of([factors[i] for i in timed]))
            values = [v for i, v in enumerate(values) if i not in timed]
        for value in values:
            result = result * value
        return result

    def _quotient(self, node: Binary) -> Polynomial:
        top, bottom = self.polynomial(node.left), self.polynomial(node.right)
        kinds = bottom.kinds()
        if not bottom.terms:
            refuse(node.right, "This divides by zero.", "Give the divisor another value.")
        if kinds & _SIGNALS:
            self._refuse_signals(node, bottom, "the quotient by")
        self._note_divisor(node.right, bottom)
        if len(bottom) == 1:
            return top * bottom.inverse()
        if Kind.TIME in kinds and Kind.PARAMETER in kinds:
            self._refuse_mixed(node.right)
        kind = Kind.TIME if Kind.TIME in kinds else Kind.PARAMETER
        if kind is Kind.TIME and len(top) > 1 and top.kinds() == {Kind.TIME}:
            return self._function(kind, node)
        return top * self._function(kind, node.right).inverse()

    def _power(self, node: Binary) -> Polynomial:
        base, exponent = self.polynomial(node.left), self.polynomial(node.right).value
        kinds = base.kinds() | self.polynomial(node.right).kinds()
        if not kinds:
            return Polynomial.constant(constant_value(self.folded(node), {}))
        if exponent is not None and exponent.denominator == 1 and abs(exponent) <= 10**6:
            return self._whole_power(node, base, int(exponent))
        if kinds & _SIGNALS:
            what = "the root of" if exponent is not None else "a power that changes with"
            self._refuse_signals(node, base + self.polynomial(node.right), what)
        if len(kinds) > 1:
            self._refuse_mixed(node)
        return self._function(kinds.pop(), node)

    def _whole_power(self, node: Binary, base: Polynomial, exponent: int) -> Polynomial:
        kinds = base.kinds()
        if exponent >= 0:
            if exponent > 1 and len(base) > 1 and kinds == {Kind.TIME}:
                return self._function(Kind.TIME, node.left) ** exponent
            return base**exponent
        if kinds & _SIGNALS:
            self._refuse_signals(node, base, "the quotient by")
        if not base.terms:
            refuse(node.left, "This divides by zero.", "Give the divisor another value.")
        self._note_divisor(node.left, base)
        if len(base) > 1:
            if len(kinds) > 1:
                self._refuse_mixed(node.left)
            base = self._function(kinds.pop(), node.left)
        return base.inverse() ** -exponent

    def _note_divisor(self, node: Node, value: Polynomial) -> None:
        timed = sorted(a for a in value.atoms() if a.kind is Kind.TIME)
        if len(value) == 1:
            found = [self.functions[a] for a in timed]
            self.divisors += [replace(x, origin=node.origin or x.origin) for x in found]
        elif timed:
            self.divisors.append(self.folded(node))

    def _call(self, node: Call) -> Polynomial:
        arguments = [self.polynomial(a) for a in node.arguments]
        kinds = {kind for a in arguments for kind in a.kinds()}
        if kinds & _SIGNALS:
            self._refuse_signals(node, next(a for a in arguments if a.kinds() & _SIGNALS), f"{node.function} of")
        if len(kinds) > 1:
            self._refuse_mixed(node)
        if not kinds:
            return Polynomial.constant(self._constant_call(node))
        kind = kinds.pop()
        if kind is Kind.PARAMETER and node.function in _TIMED:
            refuse(
                node, f"{_NOT_BUILT}: {node.function} of an adjustable parameter.", "Fix the parameter, or use t in it."
            )
        settled = self._settled(node) if kind is Kind.TIME else None
        return Polynomial.constant(settled) if settled is not None else self._function(kind, node)

    def _constant_call(self, node: Call) -> Fraction:
        tree = self.folded(node)
        if isinstance(tree, Number):
            return tree.value
        value = float(numeric_tree(tree, np.zeros(1))[0])
        if not np.isfinite(value):
            refuse(node, "This has no finite value.", "Write numbers of usual size.")
        return Fraction(value)

    def _settled(self, node: Call) -> Fraction | None:
        """Value of a step that is on from the start, or that never comes within the run."""
        if node.function != "step":
            return None
        line = line_of(self.folded(node.arguments[0]))
        if line is None:
            return None
        start, end = line[0], line[0] + line[1] * self.duration
        if min(start, end) >= 0:
            return Fraction(1)
        return Fraction(0) if max(start, end) <= 0 else None

    def _function(self, kind: Kind, node: Node) -> Polynomial:
        tree = self.folded(node)
        allowed = {"t"} if kind is Kind.TIME else self.adjustable
        if all(n.name in allowed for n in names_of(tree)):
            return Polynomial.of(self._register(kind, tree, node), 1, node.origin)
        tree = replace(self._without_cancelled(node), origin=node.origin)
        return Polynomial.of(self._register(kind, tree, tree), 1, node.origin)

    def _without_cancelled(self, node: Node) -> Node:
        """Tree of a function in which names cancel, as x in sin(t + x - x)."""

        def clean(inner: Node) -> Node:
            return sum_tree(self.polynomial(inner), self.functions)

        if isinstance(node, Binary) and not _is_sum(node):
            return Binary(node.operator, clean(node.left), clean(node.right), node.origin)
        if isinstance(node, Call):
            return Call(node.function, tuple(map(clean, node.arguments)), node.origin)
        return clean(node)

    def _register(self, kind: Kind, folded: Node, written: Node) -> Atom:
        atom = Atom(kind, text_of(folded))
        self.functions.setdefault(atom, folded)
        self.written.setdefault(atom, written)
        return atom

    def folded(self, node: Node) -> Node:
        """The tree with all names but ``t`` and adjustable parameters turned into numbers."""
        if isinstance(node, Number):
            return node
        if isinstance(node, Name):
            if node.name in self.formulas:
                return self.folded(self.formulas[node.name])
            value = PI if node.name == "pi" else self.fixed.get(node.name)
            return node if value is None else Number(value, node.origin)
        if isinstance(node, Minus):
            made: Node = Minus(self._part(node.operand), node.origin)
        elif isinstance(node, Binary):
            made = Binary(node.operator, self._part(node.left), self._part(node.right), node.origin)
        else:
            made = Call(node.function, tuple(self._part(a) for a in node.arguments), node.origin)
        return Number(constant_value(made, {}), node.origin) if _foldable(made) else made

    def _part(self, node: Node) -> Node:
        """Part of a folded tree; a number where its names cancel, as in c - c."""
        value = self.polynomial(node).value
        return self.folded(node) if value is None else Number(value, node.origin)

    def _refuse_signals(self, node: Node, inner: Polynomial, what: str) -> NoReturn:
        atoms = sorted(a for a in inner.atoms() if a.kind in _SIGNALS)
        names = ", ".join(dict.fromkeys(a.text for a in atoms))
        if all(a.name in self.sources for a in atoms):
            refuse(
                node,
                f"{_NOT_BUILT}: {what} the input {names}, which is {self.sources[atoms[0].name]}.",
                "Supply the function itself as an input of its own.",
            )
        refuse(
            node,
            f"{_NOT_BUILT}: {what} a signal ({names}).",
            "Right-hand sides are polynomials in the signals; put a polynomial in its place that fits over the range.",
        )

    def _refuse_mixed(self, node: Node) -> NoReturn:
        refuse(
            node,
            f"{_NOT_BUILT}: a function of time that an adjustable parameter changes from within.",
            "Fix the parameter, or supply the function as an input.",
        )


def _is_sum(node: Node) -> bool:
    while isinstance(node, Minus):
        node = node.operand
    return isinstance(node, Binary) and node.operator in "+-"


def _foldable(node: Node) -> bool:
    if isinstance(node, Minus):
        return isinstance(node.operand, Number)
    if isinstance(node, Binary):
        return isinstance(node.left, Number) and isinstance(node.right, Number)
    return isinstance(node, Call) and node.function not in _TIMED and all(isinstance(a, Number) for a in node.arguments)
