"""The explicit system: x' = f(x, u, t), polynomial in states, sources and kept signals."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import TypeAlias

import numpy as np

from patchplan.equation.problem import Parameter
from patchplan.equation.tree import Node, Origin
from patchplan.equation.waveform import Waveform

#: Powers of named signals, sorted by name: x^2*y is (("x", 2), ("y", 1)); () is 1.
Monomial: TypeAlias = tuple[tuple[str, int], ...]


@dataclass(frozen=True, slots=True)
class Term:
    """coefficient * (product of knobs) * (product of factors).

    Attributes
    ----------
    coefficient
        Exact; a 1e-17 rational stand-in where the file's expression is irrational.
    factors
        Names of states, sources and kept signals with their powers.
    knobs
        Sorted names of entries of ``System.knobs`` that multiply the term.
    """

    coefficient: Fraction
    factors: Monomial = ()
    knobs: tuple[str, ...] = ()
    origin: Origin | None = field(default=None, compare=False)

    @property
    def degree(self) -> int:
        """Number of signals multiplied; 0 for a constant, 1 for a plain wire."""
        return sum(power for _, power in self.factors)

    def __str__(self) -> str:
        parts = [str(self.coefficient), *(f"[{k}]" for k in self.knobs)]
        return "*".join(parts + [n if p == 1 else f"{n}^{p}" for n, p in self.factors])


@dataclass(frozen=True, slots=True)
class Row:
    """``name' = sum(terms)`` for a state, ``name = sum(terms)`` for an algebraic signal; terms in canonical order."""

    name: str
    terms: tuple[Term, ...]
    origin: Origin | None = field(default=None, compare=False)

    def __str__(self) -> str:
        return f"{self.name}: " + (" + ".join(map(str, self.terms)) or "0")


def row_of(name: str, terms: Iterable[Term], origin: Origin | None = None) -> Row:
    """Row with like terms added, zeros dropped, in canonical order."""
    sums: dict[tuple[tuple[str, ...], Monomial], tuple[Fraction, Origin | None]] = {}
    for term in terms:
        key = (term.knobs, term.factors)
        before, place = sums.get(key, (Fraction(0), term.origin))
        sums[key] = (before + term.coefficient, place)
    kept = (Term(c, f, k, o) for (k, f), (c, o) in sums.items() if c)
    return Row(name, tuple(sorted(kept, key=lambda x: (len(x.factors), x.factors, x.knobs))), origin)


@dataclass(frozen=True, slots=True)
class State:
    """A state variable with its exact start value [problem units]."""

    name: str
    start: Fraction


@dataclass(frozen=True, slots=True)
class Source:
    """A signal that is a function of time alone.

    Attributes
    ----------
    name
        The input's name, or the canonical text of a time function of an equation (``cos(t)``).
    waveform
        None for an input known only by its bounds.
    within
        Bounds of such an input [problem units].
    external
        False for steps and pulses, which the board switches from its own reference.
    """

    name: str
    waveform: Waveform | None
    within: tuple[Fraction, Fraction] | None = None
    external: bool = True


def level_of(source: Source, duration: float) -> float:
    """Value of a step or pulse while it is on [problem units], 0 where it never is within the run.

    Parameters
    ----------
    duration
        Run [problem time].
    """
    if source.external or source.waveform is None:
        return 0.0
    values = source.waveform.values(np.array([0.0, *source.waveform.jumps(duration)]))
    return float(values[np.argmax(np.abs(values))])


@dataclass(frozen=True, slots=True)
class Knob:
    """A function of adjustable parameters that multiplies terms: ``c`` itself, or ``1/m``.

    ``value``, ``low`` and ``high`` are of the function, over the box of its parameters.
    """

    name: str
    tree: Node
    parameters: tuple[str, ...]
    value: Fraction
    low: Fraction
    high: Fraction

    @property
    def size(self) -> Fraction:
        """What its stage is laid out for: the magnitude of its value, or that of its far end where the value is 0."""
        return abs(self.value) or max(abs(self.low), abs(self.high))

    @property
    def sign(self) -> int:
        """Sign of its value, or of its range where the value is 0."""
        return -1 if self.value < 0 or (not self.value and self.low < 0) else 1


@dataclass(frozen=True, slots=True)
class System:
    """The equations solved for the highest derivatives and reduced to first order.

    Attributes
    ----------
    rows
        One per state, in the order of ``states``.
    signals
        Algebraic signals in an order in which each needs only earlier ones; includes every watched signal that is
        no state or source. A definition that enters products is kept as a signal and appears in ``factors``.
    watch
        (signal name, polarity asked for or 0); names of states, sources or signals.
    time_unit_seconds
        Seconds in one unit of problem time.
    derived
        Signals that no board sums up: changes of variables, which the tolerances of parts do not touch.
    """

    states: tuple[State, ...]
    rows: tuple[Row, ...]
    signals: tuple[Row, ...]
    sources: tuple[Source, ...]
    knobs: tuple[Knob, ...]
    adjustable: tuple[Parameter, ...]
    watch: tuple[tuple[str, int], ...]
    duration: Fraction
    time_unit: str
    time_unit_seconds: Fraction
    derived: tuple[str, ...] = ()

    @property
    def is_linear(self) -> bool:
        """Whether no term multiplies two signals of which one depends on a state, and no signal is time varying."""
        return all(t.degree <= 1 for row in (*self.rows, *self.signals) for t in row.terms)

    def knob_values(self) -> Mapping[str, float]:
        """Nominal value of every knob."""
        return {k.name: float(k.value) for k in self.knobs}

    def __str__(self) -> str:
        lines = [f"state {s.name} starts at {s.start}" for s in self.states]
        lines += [f"d/dt {row}" for row in self.rows] + [f"signal {row}" for row in self.signals]
        lines += [f"source {s.name}" for s in self.sources] + [f"knob {k.name} {k.low}..{k.high}" for k in self.knobs]
        return "\n".join(lines)
