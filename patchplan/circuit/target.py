"""What the chosen parts, series and supply offer to Sizing."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import TypeVar

from patchplan.circuit.catalogue import Catalogue, PartData
from patchplan.equation.problem import Build, Stock
from patchplan.errors import CannotBuild
from patchplan.sizing.records import MultiplierFigures, OpAmpFigures, Pile, Target
from patchplan.sizing.series import values_between

Figures = TypeVar("Figures", OpAmpFigures, MultiplierFigures)

#: Limits are ends that count, through rounding too.
_SLACK = 1e-12


def target_of(build: Build, catalogue: Catalogue) -> Target:
    """Purchasable values, swings and figures for a build.

    The multiplier's supply is left to :func:`check_multiplier`, as a board without multipliers does not need it.

    Raises
    ------
    CannotBuild
        Where a part is unknown, the supply is outside a part's range, or the reference is outside the swing.
    """
    low, high = build.supply
    op_amp = _op_amp(build, _part(catalogue.op_amps, build.op_amp, "op amp"))
    if not op_amp.low < 0 < op_amp.high:
        raise CannotBuild(
            f"Ground must lie inside the swing of {op_amp.name}, which is {op_amp.low:.3g} V to {op_amp.high:.3g} V on "
            f"a supply of {low:g} V to {high:g} V. Choose rails on both sides of 0 V."
        )
    if build.reference > min(op_amp.high, -op_amp.low):
        raise CannotBuild(
            f"The reference of {build.reference:g} V is outside the swing of {op_amp.name}, {op_amp.low:.3g} V to "
            f"{op_amp.high:.3g} V, and is wanted in both polarities. Choose a lower reference or a higher supply."
        )
    switch = switch_for(build, catalogue) if build.run != "free" else None
    resistors = _piles(build.resistor_stock, build.resistor_limits, build.resistor_tolerance, "resistor")
    capacitors = _piles(build.capacitor_stock, build.capacitor_limits, build.capacitor_tolerance, "capacitor")
    return Target(
        resistors=_values(resistors, build.resistors, build.resistor_limits, "resistor"),
        capacitors=_values(capacitors, build.capacitors, build.capacitor_limits, "capacitor"),
        resistor_tolerance=_worst(resistors, build.resistor_tolerance),
        capacitor_tolerance=_worst(capacitors, build.capacitor_tolerance),
        reference=build.reference,
        reference_tolerance=build.reference_tolerance,
        op_amp=op_amp,
        multiplier=_multiplier(build, _part(catalogue.multipliers, build.multiplier, "multiplier")),
        switch_on=switch.si("on_resistance") if switch else 0.0,
        switch_leakage=switch.si("leakage") if switch else 0.0,
        pairs=build.pairs,
        resistor_piles=resistors,
        capacitor_piles=capacitors,
        other_op_amps=tuple(_others(build, catalogue.op_amps.values(), op_amp.name, _op_amp)),
        other_multipliers=tuple(_other_multipliers(build, catalogue)),
    )


def _others(
    build: Build, parts: Iterable[PartData], taken: str, make: Callable[[Build, PartData], Figures]
) -> Iterator[Figures]:
    """Figures of the other parts of a kind that take the supply and have room for the reference."""
    low, high = build.supply
    for part in parts:
        fits = part.si("supply_min") <= high - low <= part.si("supply_max")
        room = min(high - part.si("swing_high"), -(low + part.si("swing_low")))
        if part.name != taken and fits and room >= build.reference:
            yield make(build, part)


def _other_multipliers(build: Build, catalogue: Catalogue) -> Iterator[MultiplierFigures]:
    """Those that the same wiring suits: inputs that are not differential ask for other signs."""
    least = catalogue.multipliers[build.multiplier].differential
    parts = [m for m in catalogue.multipliers.values() if m.differential or not least]
    return _others(build, parts, build.multiplier, _multiplier)


def switch_for(build: Build, catalogue: Catalogue) -> PartData:
    """First analog switch of the catalogue that takes the supply.

    Raises
    ------
    CannotBuild
        Where none does.
    """
    total = build.supply[1] - build.supply[0]
    for switch in catalogue.switches.values():
        if switch.si("supply_min") <= total <= switch.si("supply_max"):
            return switch
    raise CannotBuild(
        f"No analog switch of the catalogue takes a supply of {total:g} V in total. Add one as [part.NAME] with "
        'kind = "switch", or choose run = "free", which needs no switches.'
    )


def reference_for(build: Build, catalogue: Catalogue) -> PartData | None:
    """First reference of the catalogue that gives the volts wanted on the high rail, None where none does."""
    rail = build.supply[1]
    for part in catalogue.references.values():
        fits = part.si("supply_min") <= rail <= part.si("supply_max")
        if fits and math.isclose(part.si("volts"), build.reference, rel_tol=1e-3):
            return part
    return None


def _op_amp(build: Build, part: PartData) -> OpAmpFigures:
    _check_supply(build, part)
    low, high = build.supply
    return OpAmpFigures(
        name=part.name,
        gain=part.si("gain"),
        gain_bandwidth=2 * math.pi * part.si("gain_bandwidth"),
        slew=part.si("slew"),
        low=low + part.si("swing_low"),
        high=high - part.si("swing_high"),
        offset=part.si("offset"),
        bias=part.si("bias"),
        load=part.si("load"),
    )


def check_multiplier(build: Build, catalogue: Catalogue) -> None:
    """Refuse a supply that the multiplier does not take.

    Raises
    ------
    CannotBuild
        With the range that it takes.
    """
    part = catalogue.multipliers[build.multiplier]
    _check_supply(build, part)
    if _multiplier_swing(build, part) <= 0:
        low, high = build.supply
        raise CannotBuild(f"{part.name} has no swing on a supply of {low:g} V to {high:g} V. Choose a higher supply.")


def _multiplier_swing(build: Build, part: PartData) -> float:
    low, high = build.supply
    return min(high - part.si("swing_high"), -(low + part.si("swing_low")))


def _multiplier(build: Build, part: PartData) -> MultiplierFigures:
    swing = _multiplier_swing(build, part)
    return MultiplierFigures(
        name=part.name,
        scale=part.si("scale"),
        limit=min(part.si("full_scale"), swing) if swing > 0 else part.si("full_scale"),
        bandwidth=2 * math.pi * part.si("bandwidth"),
        slew=part.si("slew"),
        offset=part.si("offset"),
        scale_error=part.si("scale_error"),
        bias=part.si("bias"),
        differential=part.differential,
    )


def _check_supply(build: Build, part: PartData) -> None:
    low, high = build.supply
    least, largest = part.si("supply_min"), part.si("supply_max")
    if not least <= high - low <= largest:
        raise CannotBuild(
            f"The supply of {low:g} V to {high:g} V is {high - low:g} V in total; {part.name} takes {least:g} V to "
            f"{largest:g} V. Change build.supply or choose another part."
        )


def _part(parts: Mapping[str, PartData], name: str, kind: str) -> PartData:
    if name not in parts:
        raise CannotBuild(f"The {kind} {name} is not in the catalogue. Known are {', '.join(parts)}.")
    return parts[name]


def _piles(stock: Stock | None, limits: tuple[float, float], tolerance: float, kind: str) -> tuple[Pile, ...] | None:
    """The parts on hand inside the limits, by value."""
    if stock is None:
        return None
    low, high = limits
    piles = []
    for row in stock.rows:
        if row.count and low * (1 - _SLACK) <= row.value <= high * (1 + _SLACK):
            usual = tolerance if row.measured is None else 0.0
            of = usual if row.tolerance is None else row.tolerance
            piles.append(Pile(row.measured or row.value, row.count, row.value, of, row.serial))
    if not piles:
        raise CannotBuild(
            f"{stock.file} has no {kind} between {low:g} and {high:g}. Widen {kind}_limits under [build], or add parts."
        )
    return tuple(sorted(piles, key=lambda pile: (pile.value, pile.tolerance)))


def _worst(piles: tuple[Pile, ...] | None, tolerance: float) -> float:
    return tolerance if piles is None else max(pile.tolerance for pile in piles)


def _values(piles: tuple[Pile, ...] | None, series: str, limits: tuple[float, float], kind: str) -> tuple[float, ...]:
    if piles is not None:
        return tuple(dict.fromkeys(pile.value for pile in piles))
    values = values_between(series, *limits)
    if not values:
        raise CannotBuild(
            f"The series {series} has no {kind} between {limits[0]:g} and {limits[1]:g}. Widen the limits."
        )
    return values
