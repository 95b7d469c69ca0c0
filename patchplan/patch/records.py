"""The Patch: stages and wires with signed coefficients, no volts yet."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from patchplan.equation.system import Knob, Source
from patchplan.equation.tree import Origin

#: Stage kinds. ``reference`` is the board's constant (signal 1), ``source`` comes from a waveform.
KINDS = ("reference", "source", "integrator", "summer", "inverter", "multiplier")


@dataclass(frozen=True, slots=True)
class Wire:
    """One input of a stage: node ``source`` with a signed coefficient in terms of signals [problem units]."""

    source: str
    coefficient: Fraction
    origin: Origin | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Stage:
    """One stage. Its node carries ``sign * signal``.

    Meaning in signals (signs apart), with w over the wires:

    - integrator: signal' = sum(coefficient_w * signal_w), starts at ``start``
    - summer: signal = knob * sum(coefficient_w * signal_w), knob 1 where None
    - inverter: same signal as its one wire's node, opposite sign
    - multiplier: signal = signal_1 * signal_2 (two wires, coefficient 1; differential inputs give either sign)
    - reference: signal 1; source: the named Source

    Every integrator, summer and inverter inverts: coefficient * sign * (sign of the wire's node) < 0, where a knob
    counts with the sign of its nominal value, or of its range where that is 0. A knob whose range crosses zero has
    ``bipolar`` set: then the stage has two wires, the two ends of its potentiometer, which carry the same signal in
    both polarities; the equation counts the first wire only, and the sign rule does not bind (the potentiometer
    gives either sign).
    """

    name: str
    kind: str
    node: str
    signal: str
    sign: int
    wires: tuple[Wire, ...] = ()
    start: Fraction = Fraction(0)
    knob: str | None = None
    bipolar: bool = False
    origin: Origin | None = field(default=None, compare=False)

    def __str__(self) -> str:
        wires = ", ".join(f"{w.coefficient}*{w.source}" for w in self.wires)
        knob = f" knob {self.knob}" if self.knob else ""
        start = f" from {self.start}" if self.kind == "integrator" else ""
        mark = "+" if self.sign > 0 else "-"
        return f"{self.name} {self.kind} {self.node} = {mark}{self.signal}{knob}{start} <- {wires}"


@dataclass(frozen=True)
class Patch:
    """All stages, each after the stages that feed it where no integrator lies between.

    Attributes
    ----------
    watched
        Signal asked for -> node that carries it.
    sign_stages_lower_bound
        Fewest sign stages (inverters, inverting summers only there for sign) proved necessary.
    signs_open
        Whether the search for the fewest sign stages stopped at its node limit before it knew them.
    factors
        Signals of the summers whose sums stand as factors in products, for fewer multipliers.
    differential
        Whether multipliers have differential inputs; else the sign of a product is that of its two wires' nodes.
    """

    stages: tuple[Stage, ...]
    watched: Mapping[str, str]
    sources: Mapping[str, Source]
    knobs: Mapping[str, Knob]
    sign_stages: int = 0
    sign_stages_lower_bound: int = 0
    signs_open: bool = False
    factors: tuple[str, ...] = ()
    differential: bool = True

    def by_node(self) -> dict[str, Stage]:
        """Stages by the node they drive."""
        return {s.node: s for s in self.stages}

    def counts(self) -> dict[str, int]:
        """Number of stages of each kind."""
        return dict(Counter(s.kind for s in self.stages))

    def __str__(self) -> str:
        return "\n".join(map(str, self.stages))
