"""The problem as the file states it: frozen records, no mathematics yet."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import Any

from patchplan.equation.tree import Node

#: Seconds in one unit of problem time.
TIME_UNITS: dict[str, Fraction] = {
    "s": Fraction(1), "ms": Fraction(1, 1000), "us": Fraction(1, 10**6),
    "min": Fraction(60), "h": Fraction(3600), "day": Fraction(86400),
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Equation:
    """One line of ``equations``: left side, right side, and its text."""

    index: int
    left: Node
    right: Node
    text: str

    @property
    def key(self) -> str:
        """Dotted key of the line in the file."""
        return f"equations[{self.index}]"


@dataclass(frozen=True, slots=True)
class Parameter:
    """A number of the problem.

    Attributes
    ----------
    value
        Exact for rational expressions; a 1e-17 rational stand-in where the expression is irrational.
    low, high
        Ends of the range of an adjustable parameter, else None.
    tolerance
        Relative tolerance of the real plant, 0.02 for "2%".
    """

    name: str
    value: Fraction
    low: Fraction | None = None
    high: Fraction | None = None
    tolerance: float = 0.0
    unit: str = ""

    @property
    def adjustable(self) -> bool:
        """Whether the parameter has a knob on the board."""
        return self.low is not None


@dataclass(frozen=True, slots=True)
class Recording:
    """Columns of a CSV file: ``times`` strictly rising [problem time], linear between rows."""

    file: str
    times: tuple[float, ...]
    values: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Input:
    """A signal from outside: exactly one of ``tree`` (in t), ``recording`` and ``within`` is given."""

    name: str
    tree: Node | None = None
    recording: Recording | None = None
    within: tuple[Fraction, Fraction] | None = None


@dataclass(frozen=True, slots=True)
class Watch:
    """A signal brought out to a terminal; polarity +1 or -1 where asked for, else 0."""

    name: str
    primes: int = 0
    polarity: int = 0

    @property
    def signal(self) -> str:
        """Name with prime marks."""
        return self.name + "'" * self.primes


@dataclass(frozen=True, slots=True)
class Terminal:
    """What the outside dictates for one signal: v = volts_per_unit * signal + offset."""

    volts_per_unit: Fraction
    offset: Fraction = Fraction(0)


@dataclass(frozen=True, slots=True)
class StockRow:
    """One line of a stock file.

    Attributes
    ----------
    value
        Marked value [ohm] or [F].
    count
        Pieces on hand; 1 with a serial number.
    tolerance
        None where the file gives none.
    measured
        Of a part with a serial number, None where it was not measured [ohm] or [F].
    line
        In the file, from 1.
    """

    value: float
    count: int
    tolerance: float | None = None
    serial: str = ""
    measured: float | None = None
    line: int = 0


@dataclass(frozen=True, slots=True)
class Stock:
    """Parts on hand, from a CSV file beside the problem file."""

    file: str
    rows: tuple[StockRow, ...]


@dataclass(frozen=True, slots=True)
class Build:
    """Wishes for the board; every field has a default.

    ``resistors`` and ``capacitors`` name a series, or a stock file whose rows ``resistor_stock`` and
    ``capacitor_stock`` hold.
    """

    supply: tuple[float, float] = (-15.0, 15.0)
    reference: float = 10.0
    reference_tolerance: float = 0.001
    run: str = "once"
    resistors: str = "E24"
    capacitors: str = "E6"
    resistor_limits: tuple[float, float] = (2e3, 1e6)
    capacitor_limits: tuple[float, float] = (1e-9, 1e-6)
    resistor_tolerance: float = 0.01
    capacitor_tolerance: float = 0.02
    op_amp: str = "TL07x"
    multiplier: str = "AD633"
    #: "free", "real time", or how many times faster than the problem the circuit runs.
    speed: str | float = "free"
    #: Whether two resistors may stand for one value.
    pairs: bool = False
    #: Whether the board gets trimmers for what tolerances do.
    trim: bool = False
    resistor_stock: Stock | None = None
    capacitor_stock: Stock | None = None
    #: Whether signals far from zero are carried as a difference; None leaves it to the planner.
    offsets: bool | None = None
    #: Form of linear blocks, as (name of the output, form); () leaves it to the planner.
    forms: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True)
class Problem:
    """A whole problem file.

    Attributes
    ----------
    parameters, inputs, terminals
        By name. ``start`` and ``ranges`` are keyed by signal with primes (``"z'"``); start values are exact.
    duration
        Length of the run [problem time].
    watch
        Empty where the file does not say; the System fills in all unknowns.
    own_parts
        The ``[part.NAME]`` tables as read.
    text, file
        The file's text and its name for messages; ``folder`` holds its recordings.
    spans
        Dotted key -> (start, end) offsets of the value in ``text``, for late errors.
    """

    title: str
    equations: tuple[Equation, ...]
    duration: Fraction
    time_unit: str = "s"
    watch: tuple[Watch, ...] = ()
    parameters: Mapping[str, Parameter] = field(default_factory=dict)
    start: Mapping[str, Fraction] = field(default_factory=dict)
    inputs: Mapping[str, Input] = field(default_factory=dict)
    ranges: Mapping[str, tuple[Fraction, Fraction]] = field(default_factory=dict)
    terminals: Mapping[str, Terminal] = field(default_factory=dict)
    build: Build = field(default_factory=Build)
    own_parts: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    text: str = ""
    file: str = "problem.toml"
    folder: Path = field(default_factory=Path)
    spans: Mapping[str, tuple[int, int]] = field(default_factory=dict)

    @property
    def time_unit_seconds(self) -> Fraction:
        """Seconds in one unit of problem time."""
        return TIME_UNITS[self.time_unit]
