"""The Circuit: parts on nets, nothing else needed to simulate or solder it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from patchplan.equation.system import Source
from patchplan.sizing.records import MultiplierFigures, OpAmpFigures

#: Net order of each kind of part.
KINDS = {
    "resistor": ("a", "b"),
    "potentiometer": ("end a", "wiper", "end b"),
    "capacitor": ("a", "b"),
    "op amp": ("plus", "minus", "out"),
    "multiplier": ("x1", "x2", "y1", "y2", "z", "w"),
    "switch": ("a", "b"),
    "reference": ("out",),
    "source": ("out",),
    "decoupling": ("rail", "ground"),
}
GROUND = "0"
#: ``model`` of a resistor that bounds an integrator's drift; it is no term of the equation.
DC_LIMIT = "DC limit"


@dataclass(frozen=True, slots=True)
class Part:
    """One part.

    Attributes
    ----------
    ref
        Reference designator: R1, C1, U1A (section A of package U1), U2, SW1 ...
    value
        Ohm, farad, volts of a reference; volts per unit (signed) of a source; setting 0..1 of a potentiometer
        (resistance between end a and wiper over ``total``); on-resistance of a switch.
    total
        Track resistance of a potentiometer [ohm].
    model
        Catalogue name of an active part, dielectric of a capacitor, name of the Source of a source, or
        :data:`DC_LIMIT`.
    closed
        Of a switch: "operate" or "hold"; with ``control``: "high" or "low".
    control
        Of a switch that makes a step: name of the Source, whose line is high while the Source is not zero. Empty for
        the switches of the operate line.
    serial
        Of a single part on hand, "" for any other.
    marked
        What is written on a part that was measured, in the unit of ``value``; 0 for any other.
    pins
        Pin numbers in the order of ``nets``; empty where the catalogue knows none.
    stage
        Name of the patch stage it belongs to, "" for shared parts.
    package, section
        Package designator ("U1") and section ("A" to "D"); "" for passive parts.
    """

    ref: str
    kind: str
    nets: tuple[str, ...]
    value: float = 0.0
    tolerance: float = 0.0
    stage: str = ""
    package: str = ""
    section: str = ""
    model: str = ""
    total: float = 0.0
    closed: str = ""
    control: str = ""
    pins: tuple[int, ...] = ()
    serial: str = ""
    marked: float = 0.0

    def __str__(self) -> str:
        when = f"{self.closed} {self.control}"
        return f"{self.ref} {self.kind} {' '.join(self.nets)} {self.value:.9g} {self.model} {when}".rstrip()


@dataclass(frozen=True, slots=True)
class KnobLaw:
    """What a potentiometer does to its knob.

    Attributes
    ----------
    knob, parameter
        The function of adjustable parameters that it sets, and the parameter; "" where there are several.
    ref, stage
        The potentiometer and the stage it belongs to.
    wanted
        Range of the knob.
    covers
        The knob at both ends of the travel, setting 0 first.
    covers_least
        The same with a track at the low end of its tolerance.
    setting
        Nominal, 0 to 1.
    points
        (setting, knob, parameter), the loading of the wiper counted; the parameter is None outside its range.
    bend
        Largest distance of the law from a straight line, as a share of the travel.
    """

    knob: str
    parameter: str
    ref: str
    stage: str
    wanted: tuple[float, float]
    covers: tuple[float, float]
    covers_least: tuple[float, float]
    setting: float
    points: tuple[tuple[float, float, float | None], ...]
    bend: float


@dataclass(frozen=True, slots=True)
class Pin:
    """One pin of a package and the net it goes to.

    ``net`` is a net of the board, a rail, a control line (in capitals) or a join of the pins of a section left over.
    """

    package: str
    number: int
    net: str


@dataclass(frozen=True, slots=True)
class NodeMap:
    """What a signal node means: v(node) = sign * volts_per_unit * signal + offset_volts."""

    node: str
    signal: str
    sign: int
    volts_per_unit: float
    offset_volts: float
    limit_volts: float
    role: str


@dataclass(frozen=True)
class Circuit:
    """The board.

    Attributes
    ----------
    parts
        All parts, in a stable order.
    nodes
        By net name: the nets that carry signals.
    watched
        Signal -> net.
    time_scale
        Circuit seconds per unit of problem time (needed to drive the sources).
    duration
        Run time [circuit s].
    sources
        The waveforms behind the source parts, by name.
    start
        Node -> volts wanted at the start, for integrators that no hold network sets.
    wiring
        All pins of all packages whose pins are known.
    knobs
        The law of every potentiometer that an adjustable parameter has.
    """

    parts: tuple[Part, ...]
    nodes: Mapping[str, NodeMap]
    watched: Mapping[str, str]
    op_amp: OpAmpFigures
    multiplier: MultiplierFigures
    supply: tuple[float, float]
    time_scale: float
    duration: float
    run: str
    sources: Mapping[str, Source] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    start: Mapping[str, float] = field(default_factory=dict)
    wiring: tuple[Pin, ...] = ()
    knobs: tuple[KnobLaw, ...] = ()

    def __str__(self) -> str:
        return "\n".join(map(str, self.parts))
