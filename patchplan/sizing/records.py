"""What Sizing needs to know of the target, and what it decides."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from math import hypot

from patchplan.sizing.trim_records import Trimming


@dataclass(frozen=True, slots=True)
class OpAmpFigures:
    """Typical figures of the op amp, SI units.

    Attributes
    ----------
    gain, gain_bandwidth
        DC open-loop gain [V/V] and gain-bandwidth as an angular frequency [rad/s].
    slew
        [V/s].
    low, high
        Output swing into the rated load on the chosen supply [V].
    offset, bias
        Typical Vos [V] and Ib [A].
    load
        Rated load [ohm]: the summed load of an output is kept at or above it.
    """

    name: str
    gain: float
    gain_bandwidth: float
    slew: float
    low: float
    high: float
    offset: float
    bias: float
    load: float


@dataclass(frozen=True, slots=True)
class MultiplierFigures:
    """Typical figures of the multiplier: W = X*Y/scale; ``limit`` is the full-scale input and output [V].

    ``differential`` inputs give the product in either polarity.
    """

    name: str
    scale: float
    limit: float
    bandwidth: float
    slew: float
    offset: float
    scale_error: float
    bias: float
    differential: bool = True


@dataclass(frozen=True, slots=True)
class Pile:
    """Equal parts on hand.

    Attributes
    ----------
    value
        What the parts are planned with: the measured value where there is one [ohm], [F].
    marked
        What is written on them.
    tolerance
        Of ``value``; 0 for a measured part unless the stock file says otherwise.
    serial
        Of a single part.
    """

    value: float
    count: int
    marked: float
    tolerance: float
    serial: str = ""


@dataclass(frozen=True, slots=True)
class Target:
    """What the soldered board offers: purchasable values and the parts' figures.

    ``resistors`` and ``capacitors`` are rising values inside the limits [ohm], [F]; ``reference`` is in volts;
    ``switch_on`` is the operate switch's resistance [ohm], 0 where the run has no hold. The other parts of the
    catalogue that would do on this supply are there for advice only. ``pairs`` lets two resistors stand for one value.
    ``resistor_piles`` and ``capacitor_piles`` are the parts on hand, None where any number of each value can be had;
    else the tolerances are those of the worst of them.
    """

    resistors: tuple[float, ...]
    capacitors: tuple[float, ...]
    resistor_tolerance: float
    capacitor_tolerance: float
    reference: float
    reference_tolerance: float
    op_amp: OpAmpFigures
    multiplier: MultiplierFigures
    switch_on: float
    switch_leakage: float
    other_op_amps: tuple[OpAmpFigures, ...] = ()
    other_multipliers: tuple[MultiplierFigures, ...] = ()
    pairs: bool = False
    resistor_piles: tuple[Pile, ...] | None = None
    capacitor_piles: tuple[Pile, ...] | None = None

    @property
    def stocked(self) -> bool:
        """Whether parts are counted."""
        return self.resistor_piles is not None or self.capacitor_piles is not None


@dataclass(frozen=True, slots=True)
class Leg:
    """How one wire is made: one resistor, two that stand for one, or a T of three (in, to ground, out) [ohm].

    ``transfer`` is the resistance that would pass the same current into a virtual ground (switch not counted); ``join``
    says how two resistors are joined, "series" or "parallel".
    """

    resistors: tuple[float, ...]
    join: str = ""

    @property
    def is_network(self) -> bool:
        """Whether the leg is a T of three."""
        return len(self.resistors) == 3

    @property
    def transfer(self) -> float:
        """Equivalent resistance [ohm]: R, that of a pair, or R1 + R3 + R1*R3/R2 of a T."""
        if not self.is_network:
            return 1.0 / sum(1.0 / r for r in self.resistors) if self.join == "parallel" else sum(self.resistors)
        first, shunt, last = self.resistors
        return first + last + first * last / shunt

    @property
    def into(self) -> float:
        """Resistance that the summing node sees into the leg, its source at ground [ohm]."""
        if not self.is_network:
            return self.transfer
        first, shunt, last = self.resistors
        return last + first * shunt / (first + shunt)

    @property
    def load(self) -> float:
        """Resistance that the leg is to its source, the summing node at ground [ohm]."""
        if not self.is_network:
            return self.transfer
        first, shunt, last = self.resistors
        return first + shunt * last / (shunt + last)

    @property
    def shares(self) -> tuple[float, ...]:
        """Relative change of the transfer per relative change of each resistor, sizes alone."""
        if not self.is_network:
            whole = self.transfer
            return tuple(whole / r if self.join == "parallel" else r / whole for r in self.resistors)
        first, shunt, last = self.resistors
        cross = first * last / shunt
        return (first + cross) / self.transfer, cross / self.transfer, (last + cross) / self.transfer

    @property
    def spread(self) -> float:
        """Relative change of the transfer per relative change of its resistors, root sum of squares."""
        return hypot(*self.shares)


@dataclass(frozen=True, slots=True)
class StageSizing:
    """Values of one stage.

    Attributes
    ----------
    legs
        One for each wire of the Patch's stage, in its order; empty for multipliers, sources and the reference.
    capacitor
        Integrators only [F].
    feedback
        Feedback resistor of a summer or inverter, or the DC-limit resistor of an integrator; 0 for none [ohm].
        With a knob: the value at the knob's nominal setting, or at its far end where the knob is nominally 0.
    start
        (resistor from the reference, resistor from the output) [ohm]; the first is 0 where the start value is 0;
        None where the stage has no hold (``run = "free"`` and all stages but integrators).
    start_volts
        Start value that these resistors give [V], signed.
    """

    stage: str
    legs: tuple[Leg, ...] = ()
    capacitor: float = 0.0
    feedback: float = 0.0
    start: tuple[float, float] | None = None
    start_volts: float = 0.0


@dataclass(frozen=True, slots=True)
class NodeScale:
    """Scale of one node: v = sign * volts_per_unit * (signal - offset), ``peak`` and ``limit`` in volts."""

    node: str
    volts_per_unit: float
    peak_volts: float
    limit_volts: float


@dataclass(frozen=True, slots=True)
class Coefficient:
    """One realised number: wanted and realised in problem units, with the fitted scale factors."""

    at: str
    wanted: float
    realised: float

    @property
    def error_percent(self) -> float:
        """Relative error [%]."""
        return 100.0 * (self.realised / self.wanted - 1.0)


@dataclass(frozen=True, slots=True)
class SpeedLimit:
    """One figure that keeps the board from running faster or slower.

    Attributes
    ----------
    end
        ``fast`` or ``slow``.
    stage
        Stage that it binds; where all stages add up, the one that adds most.
    part, figure, value, unit
        Whose figure it is, which, and how large: TL07x, gain-bandwidth, 3e6, Hz.
    time_scale
        Lowest (``fast``) or highest (``slow``) time scale that it allows.
    text
        What it is in words, for sentences.
    hard
        Whether no values reach beyond it; else a board beyond it can be built, at a larger error.
    """

    end: str
    stage: str
    part: str
    figure: str
    value: float
    unit: str
    time_scale: float
    text: str
    hard: bool = False


@dataclass(frozen=True, slots=True)
class Loop:
    """One independent loop of the gains: the nodes it runs through, and the relative error of its gain.

    ``absorbed`` marks the loop whose time constant a free speed takes up; the others count relative to it.
    """

    name: str
    error: float
    absorbed: bool = False


@dataclass(frozen=True)
class Sizing:
    """Scale factors, speed and values.

    Attributes
    ----------
    time_scale
        Circuit seconds per unit of problem time.
    window, limits
        Lowest and highest usable time scale, and a sentence on what sets each end.
    scales
        By node.
    stages
        By stage name.
    loop_errors
        Relative error of each independent loop of the patch: what no choice of scale factors can take away.
    loops
        The same with their names, and the loop that a free speed takes up.
    faults
        Sentences on what cannot be built; empty for a usable plan.
    notes
        Sentences for the plan: drift of modes, content below the DC-limit decade, forced choices.
    speed_limits
        Every figure that limits the speed, those at the window's ends among them.
    outside
        A sentence where the speed asked for lies outside the window: which limit, at what cost; "" inside.
    trimming
        Trimmers that the board has, or that would lower its spread; None where that was not looked at.
    """

    time_scale: float
    window: tuple[float, float]
    limits: tuple[str, str]
    scales: Mapping[str, NodeScale]
    stages: Mapping[str, StageSizing]
    coefficients: tuple[Coefficient, ...]
    loop_errors: tuple[float, ...] = ()
    faults: tuple[str, ...] = ()
    notes: tuple[str, ...] = field(default=())
    speed_limits: tuple[SpeedLimit, ...] = ()
    trimming: Trimming | None = None
    loops: tuple[Loop, ...] = ()
    outside: str = ""
