"""Polynomials to the System's terms: functions of time become sources, parameters become knobs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from patchplan.equation.algebra import Algebra
from patchplan.equation.formula import sum_tree
from patchplan.equation.knobs import Knobs
from patchplan.equation.polynomial import Kind, Polynomial, Powers, part
from patchplan.equation.problem import Input
from patchplan.equation.system import Monomial, Row, Source, Term, row_of
from patchplan.equation.tree import Call, Node, Origin, text_of
from patchplan.equation.waveform import Waveform


@dataclass
class Assembly:
    """Sources and knobs met so far.

    Attributes
    ----------
    sources
        By name, in order of appearance.
    """

    algebra: Algebra
    inputs: Mapping[str, Input]
    knobs: Knobs
    sources: dict[str, Source] = field(default_factory=dict)
    _names: dict[str, str] = field(default_factory=dict)

    def row(self, name: str, value: Polynomial) -> Row:
        """One row in canonical order."""
        groups: dict[tuple[Powers, Powers], dict[Powers, Fraction]] = {}
        places: dict[Powers, Origin] = {}
        for powers, coefficient in value.terms.items():
            signals, parameters = part(powers, Kind.SIGNAL, Kind.SOURCE), part(powers, Kind.PARAMETER)
            groups.setdefault((signals, parameters), {})[part(powers, Kind.TIME)] = coefficient
            if powers in value.places:
                places.setdefault(signals, value.places[powers])
        factored: dict[Monomial, dict[Powers, Fraction]] = {}
        origins: dict[Monomial, Origin | None] = {}
        for (signals, parameters), timed in groups.items():
            for source, coefficient in self._timed(bool(signals), timed):
                factors = self._factors(signals, source)
                into = factored.setdefault(factors, {})
                into[parameters] = into.get(parameters, Fraction(0)) + coefficient
                origins.setdefault(factors, places.get(signals))
        terms = [
            Term(coefficient, factors, names, origins[factors])
            for factors, coefficients in factored.items()
            for coefficient, names in self.knobs.terms(coefficients)
        ]
        return row_of(name, terms, next(iter(origins.values()), None))

    def _factors(self, signals: Powers, source: str | None) -> Monomial:
        for atom, _ in signals:
            if atom.kind is Kind.SOURCE:
                self.input(atom.name)
        powers = {atom.text: n for atom, n in signals}
        if source is not None:
            powers[source] = powers.get(source, 0) + 1
        return tuple(sorted(powers.items()))

    def input(self, name: str) -> str:
        """Make an input a source under its own name."""
        if name not in self.sources:
            given = self.inputs[name]
            tree = self.algebra.folded(given.tree) if given.tree is not None else None
            waveform = None if given.within else Waveform(tree, given.recording)
            outside = name in self.algebra.sources or tree is None or not self._is_switched(tree)
            self.sources[name] = Source(name, waveform, given.within, outside)
        return name

    def _timed(self, multiplied: bool, timed: Mapping[Powers, Fraction]) -> list[tuple[str | None, Fraction]]:
        """Split a polynomial of functions of time into sources with coefficients.

        What multiplies a signal becomes one source, for one multiplier; added to a row, inputs and switched steps stay
        what they are.
        """
        found: list[tuple[str | None, Fraction]] = []
        merged: dict[Powers, Fraction] = {}
        for powers, coefficient in sorted(timed.items()):
            if not powers:
                found.append((None, coefficient))
            elif not multiplied and self._stands_alone(powers):
                found.append((self._source(Polynomial({powers: Fraction(1)})), coefficient))
            else:
                merged[powers] = coefficient
        if merged:
            first = next(iter(merged.values()))
            found.append((self._source(Polynomial({p: c / first for p, c in merged.items()})), first))
        return found

    def _stands_alone(self, powers: Powers) -> bool:
        ((atom, power), *rest) = powers
        if rest or power != 1:
            return False
        return atom.name in self.algebra.named or self._is_switched(self.algebra.functions[atom])

    def _source(self, value: Polynomial) -> str:
        powers = next(iter(value.terms))
        if len(value) == 1 and len(powers) == 1 and powers[0][1] == 1 and powers[0][0].name in self.algebra.named:
            return self.input(powers[0][0].name)
        tree = sum_tree(value, self.algebra.functions)
        key = text_of(tree)
        if key not in self._names:
            name = text_of(sum_tree(value, self.algebra.written, rounded=True))
            # The same text may stand for two functions where an input and a formula share it.
            while name in self.sources:
                name += " "
            self._names[key] = name
            self.sources[name] = Source(name, Waveform(tree), None, not self._is_switched(tree))
        return self._names[key]

    def _is_switched(self, tree: Node) -> bool:
        """Whether the board can make the function itself: a constant times one step or pulse of t."""
        value = self.algebra.polynomial(tree)
        powers = next(iter(value.terms), ())
        if len(value) != 1 or len(powers) != 1 or powers[0][1] != 1:
            return False
        function = self.algebra.functions[powers[0][0]]
        return isinstance(function, Call) and function.function in ("step", "pulse")
