"""The Form: the System after changes of variables, still equations."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from patchplan.equation.system import System


@dataclass(frozen=True)
class Form:
    """Equations in the variables that the board carries.

    Attributes
    ----------
    system
        Rewritten: every name in it stands for (signal of the problem - offset).
    offsets
        Name -> offset [problem units]; absent means 0.
    scales
        Name -> volts per unit dictated by a terminal, signed; absent means free.
    sums
        States that the problem does not have, each as a sum of its states: name -> weights.
    notes
        Sentences: why an offset was put in, what a terminal asked for.
    """

    system: System
    offsets: Mapping[str, Fraction] = field(default_factory=dict)
    scales: Mapping[str, Fraction] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    sums: Mapping[str, Mapping[str, Fraction]] = field(default_factory=dict)
