"""Unknown values of the board and what they may be: resistors, T legs, capacitors, feedback, start ratios."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cached_property, lru_cache
from math import exp, log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.model import Model, Ratio
from patchplan.sizing.networks import STEP, largest_transfer, networks
from patchplan.sizing.records import Leg, Target
from patchplan.sizing.speed_errors import COMFORTABLE

Array = NDArray[np.float64]
#: Feedback resistors of summers sit between these, for the pole with the input capacitance [ohm].
FEEDBACK = (5e3, 1e5)
#: Start networks hold through a feedback resistor near this value [ohm] (common practice, no source).
START_FEEDBACK = 2e4
#: How far capacitors and feedback resistors may move from those picked at first, in logs: two steps of E6, six of E24.
CAPACITOR_WIDTH, FEEDBACK_WIDTH = 0.9, 0.6
#: How much more a resistor out of all reach counts than one that a network of three replaces.
IMPOSSIBLE = 100.0
#: Networks of three are offered to legs that are wanted above this share of the largest resistor, in logs.
NETWORKS_FROM = 0.2


@dataclass(frozen=True)
class Choice:
    """What one unknown may be: rising log values, the parts behind each, and how a leg's two are joined."""

    logs: Array
    parts: tuple[tuple[float, ...], ...]
    joins: tuple[str, ...] = ()

    def join(self, place: int) -> str:
        """How the parts of one value are joined, empty but for pairs."""
        return self.joins[place] if self.joins else ""

    @cached_property
    def into(self) -> Array:
        """Conductance that a summing node sees into each leg, its source at ground [S]."""
        return np.array([1.0 / Leg(p, self.join(k)).into for k, p in enumerate(self.parts)])

    def near(self, wanted: float, width: float) -> Array:
        """Positions of the values within ``width`` of a wanted log, at least the nearest one."""
        low, high = np.searchsorted(self.logs, [wanted - width, wanted + width])
        if low == high:
            nearest = int(np.argmin(np.abs(self.logs - wanted)))
            return np.array([nearest])
        return np.arange(low, high)


@dataclass(frozen=True)
class Values:
    """Chosen parts and scale factors.

    Attributes
    ----------
    parts
        (stage, what) -> the part values behind that unknown.
    theta
        Fitted logs of scale factors and speed.
    worst
        Largest predicted error of a watched signal, as a fraction of peak.
    loop_errors
        Relative errors of the independent loops, shape ``(n_loops,)``.
    errors
        Relative error of each row, shape ``(n_rows,)``.
    missing
        Sentences on parts that are not on hand.
    joins
        (stage, wire) -> how the two resistors of a pair are joined.
    """

    parts: dict[tuple[str, int | str], tuple[float, ...]]
    theta: Array
    worst: float
    loop_errors: Array
    errors: Array
    missing: tuple[str, ...] = ()
    joins: Mapping[tuple[str, int | str], str] = field(default_factory=dict)

    def leg(self, stage: str, wire: int) -> Leg:
        """How one wire is made."""
        return Leg(self.parts[stage, wire], self.joins.get((stage, wire), ""))


@dataclass(frozen=True)
class Unknowns:
    """Columns of y: one for each wire, start ratio, capacitor and feedback resistor.

    Attributes
    ----------
    names
        (stage, what): what is a wire's index, -1 for the start ratio, ``C`` or ``Rf``.
    incidence
        B, shape ``(n_rows, n_unknowns)``.
    """

    names: tuple[tuple[str, int | str], ...]
    incidence: Array

    def column(self, stage: str, what: int | str) -> int:
        """Column of one unknown."""
        return self.names.index((stage, what))


def find_unknowns(ratios: tuple[Ratio, ...], continuous: Mapping[str, int]) -> Unknowns:
    """Columns and incidence: R*C for integrators, R/Rf for summers, the ratio itself for start values."""
    names: dict[tuple[str, int | str], int] = {}
    entries: list[tuple[int, int, float]] = []
    for row, ratio in enumerate(ratios):
        entries.append((row, names.setdefault((ratio.stage, ratio.wire), len(names)), 1.0))
        if ratio.kind == "integrator":
            entries.append((row, names.setdefault((ratio.stage, "C"), len(names)), 1.0))
        elif ratio.kind == "summer" and ratio.stage not in continuous:
            entries.append((row, names.setdefault((ratio.stage, "Rf"), len(names)), -1.0))
    incidence = np.zeros((len(ratios), len(names)))
    if entries:
        rows, columns, values = zip(*entries, strict=True)
        incidence[list(rows), list(columns)] = values
    return Unknowns(tuple(names), incidence)


@lru_cache(maxsize=8)
def plain(values: tuple[float, ...]) -> Choice:
    """One part out of a series."""
    return Choice(np.log(np.array(values)), tuple((v,) for v in values))


@lru_cache(maxsize=8)
def all_legs(resistors: tuple[float, ...], step: float = STEP) -> Choice:
    """One resistor, or above the largest a network of three."""
    single, long = plain(resistors), _networks(resistors, step)
    kept = np.flatnonzero(long.logs > single.logs[-1] + 1e-9)
    return Choice(np.concatenate([single.logs, long.logs[kept]]), single.parts + tuple(long.parts[k] for k in kept))


def choices_of(
    unknowns: Unknowns, target: Target, picked: Mapping[tuple[str, int | str], float], centre: Array
) -> tuple[Choice, ...]:
    """What each unknown may be, near the stage values picked and the logs wanted, shape ``(n_unknowns,)``."""
    least, most = log(target.resistors[0]), log(target.resistors[-1])
    legs = [(s, x) for (s, what), x in zip(unknowns.names, centre.tolist(), strict=True) if what not in ("C", "Rf", -1)]
    tight = {stage for stage, x in legs if x < least + NETWORKS_FROM}
    long = {stage for stage, x in legs if x > most} - tight
    choices = []
    for (stage, what), wanted in zip(unknowns.names, centre.tolist(), strict=True):
        if isinstance(what, str):
            series, width = (target.capacitors, CAPACITOR_WIDTH) if what == "C" else (target.resistors, FEEDBACK_WIDTH)
            # A stage with a network of three keeps the capacitor that needs the least of it, as offsets count by it,
            # unless it has small resistors, too.
            width = 0.0 if what == "C" and stage in long else width
            choices.append(plain(tuple(v for v in series if abs(log(v) - wanted) <= width + 1e-9)))
        elif what == -1:
            choices.append(start_ratios(target.resistors))
        else:
            reach = most - NETWORKS_FROM
            choices.append(all_legs(target.resistors) if wanted > reach else plain(target.resistors))
    return tuple(choices)


def resistor(wanted: float, target: Target) -> Choice:
    """One resistor, or a network of three where the wanted transfer resistance is above the largest [ohm]."""
    if wanted <= 1.03 * target.resistors[-1]:
        return plain(target.resistors)
    return _networks(target.resistors)


@lru_cache(maxsize=8)
def _networks(resistors: tuple[float, ...], step: float = STEP) -> Choice:
    """Networks of three resistors, above the largest single one."""
    parts = networks(resistors, step)
    return Choice(np.log(np.array([Leg(p).transfer for p in parts])), parts)


@lru_cache(maxsize=8)
def start_ratios(resistors: tuple[float, ...]) -> Choice:
    """All ratios R2/R1 of two purchasable resistors, each with R2 nearest to :data:`START_FEEDBACK`."""
    values = np.array(resistors)
    seconds = values[values <= START_FEEDBACK * 5] if values[0] <= START_FEEDBACK * 5 else values
    ratio = np.round(np.log(seconds[:, None] / values[None, :]), 9)
    order = np.argsort(np.abs(np.log(seconds / START_FEEDBACK)), kind="stable")
    best: dict[float, tuple[float, float]] = {}
    for second in order:
        for first in range(len(values)):
            best.setdefault(float(ratio[second, first]), (float(values[first]), float(seconds[second])))
    logs = sorted(best)
    return Choice(np.array(logs), tuple(best[x] for x in logs))


def capacitor_merit(wanted: Array, target: Target, comfortable: float = COMFORTABLE) -> tuple[Array, NDArray[np.bool_]]:
    """How little each capacitor suits a stage whose R*C products are wanted [s], and where a resistor is out of range.

    Resistors that nothing makes count most, then those that ask for a network of three, then the distance of their
    middle from ``comfortable`` [ohm]. Both have the shape ``(n_capacitors,)``.
    """
    resistors = wanted[None, :] / np.array(target.capacitors)[:, None]
    long = np.maximum(np.log(resistors / target.resistors[-1]), 0)
    small = np.maximum(np.log(target.resistors[0] / resistors), 0)
    beyond = np.maximum(np.log(resistors / largest_transfer(target.resistors)), 0)
    over = long + IMPOSSIBLE * (small + beyond)
    middle = np.abs(np.log(np.sqrt(resistors.min(axis=1) * resistors.max(axis=1)) / comfortable))
    return 100 * over.sum(axis=1) + middle, np.any(over, axis=1)


def pick_capacitor(wanted: Array, target: Target, rank: int = 0, comfortable: float = COMFORTABLE) -> float:
    """Capacitor for a stage whose R*C products are wanted [s]; ``rank`` 0 is the best, 1 the next."""
    merit, over = capacitor_merit(wanted, target, comfortable)
    order = np.argsort(merit, kind="stable")
    # Any other than the best makes networks of three longer, and offsets count by their length.
    rank = 0 if over[order[0]] else rank
    return target.capacitors[int(order[min(rank, len(order) - 1)])]


def pick_feedback(wanted: Array, target: Target) -> float:
    """Feedback resistor of a summer whose ratios R/Rf are wanted: legs and feedback around 20k, all in range."""
    values = np.array([v for v in target.resistors if FEEDBACK[0] <= v <= FEEDBACK[1]] or target.resistors)
    legs = wanted[None, :] * values[:, None]
    over = np.maximum(np.log(legs / target.resistors[-1]), 0) + np.maximum(np.log(target.resistors[0] / legs), 0)
    middle = np.abs(np.log(np.sqrt(values * np.sqrt(legs.min(axis=1) * legs.max(axis=1))) / 2e4))
    return float(values[np.argmin(100 * over.sum(axis=1) + middle)])


def pick_stage_values(
    model: Model, target: Target, wanted: Array, comfortable: Mapping[str, float], rank: Callable[[], int]
) -> dict[tuple[str, int | str], float]:
    """Capacitors (``C``) and feedback resistors (``Rf``) by stage, for the products and ratios wanted of its rows.

    ``rank`` says which capacitor of a stage's order of merit to take; ``comfortable`` as in ``choose_values``.
    """
    rows: dict[tuple[str, str], list[int]] = {}
    for row, ratio in enumerate(model.ratios):
        if ratio.kind != "start":
            rows.setdefault((ratio.stage, "C" if ratio.kind == "integrator" else "Rf"), []).append(row)
    picked: dict[tuple[str, int | str], float] = {}
    for (stage, what), members in rows.items():
        if what == "C":
            near = comfortable.get(stage, COMFORTABLE)
            picked[stage, what] = pick_capacitor(wanted[members], target, rank(), near)
        elif stage not in model.feedback:
            picked[stage, what] = pick_feedback(wanted[members], target)
    return picked


def wanted_products(model: Model, theta: Array) -> Array:
    """exp(b + A theta): wanted R*C, R/Rf and start ratios, shape ``(n_rows,)``."""
    return np.array([exp(model.at(r.want, theta)) for r in model.ratios])
