"""Which combinations to compare: those of the axes given, or some thirty from the catalogue."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from itertools import product, zip_longest

from patchplan.circuit.catalogue import Catalogue
from patchplan.compare.records import Axes
from patchplan.equation.problem import Build
from patchplan.equation.wishes import reference_for_supply

#: Combinations of a grid that the planner makes itself, and op amps in it.
MOST, MOST_OP_AMPS = 30, 5
#: Series and tolerance of resistors that are sold together, and capacitors that go with them (common practice, no
#: source); None as tolerance of capacitors leaves the file's.
VALUES: tuple[tuple[str, float, float | None], ...] = (("E24", 0.01, None), ("E12", 0.01, None), ("E96", 0.001, 0.01))
SUPPLIES = ((-15.0, 15.0), (-12.0, 12.0), (-5.0, 5.0), (-2.5, 2.5))
#: The planner's own speed divided and multiplied by this make a slower and a faster one; speeds closer to one that is
#: there than the second figure tell nothing new.
SPEED_STEP, APART = 10.0, 1.5
#: Parts that stand for a class of parts begin with this.
CLASS = "generic_"


def product_of(forms: Sequence[Build], axes: Axes, *, reference_stated: bool) -> tuple[Build, ...]:
    """All combinations of the axes; an axis that is empty stays as the file has it.

    Parameters
    ----------
    forms
        The file's build in each form of the equations to compare.
    reference_stated
        Whether the file states its reference, so that a change of supply leaves it alone.
    """
    usual = forms[0]
    every = product(
        forms,
        axes.supplies or (usual.supply,),
        axes.speeds or (usual.speed,),
        axes.tolerances or ((usual.resistor_tolerance, None),),
        axes.series or (usual.resistors,),
        axes.op_amps or (usual.op_amp,),
    )
    made = []
    for form, supply, speed, tolerance, series, op_amp in every:
        wish = _with_values(replace(form, op_amp=op_amp, speed=speed), series, *tolerance)
        made.append(_on_supply(wish, supply, reference_stated))
    return tuple(dict.fromkeys(made))


def grid_of(
    forms: Sequence[Build], catalogue: Catalogue, speeds: Sequence[str | float], *, reference_stated: bool
) -> tuple[Build, ...]:
    """At most :data:`MOST` combinations around the file's own, which comes first.

    Op amps of the catalogue by kinds of values; then, with the file's values, the op amps on another supply, at other
    speeds and in other forms.

    Parameters
    ----------
    forms, reference_stated
        As in :func:`product_of`.
    speeds
        Others than the file's.
    """
    usual = forms[0]
    variants = list(dict.fromkeys((usual, *(_with_values(usual, *values) for values in VALUES))))[: len(VALUES)]
    variants += _other_supply(usual, catalogue, reference_stated)
    for speed, form in zip_longest(speeds, forms[1:]):
        variants += [replace(usual, speed=speed)] if speed is not None else []
        variants += [form] if form is not None else []
    made = (replace(v, op_amp=name) for v in variants for name in op_amps_for(v, catalogue))
    return tuple(dict.fromkeys(made))[:MOST]


def _with_values(build: Build, series: str, resistor: float, capacitor: float | None) -> Build:
    capacitor = build.capacitor_tolerance if capacitor is None else capacitor
    if series != build.resistors:
        build = replace(build, resistors=series, resistor_stock=None)
    return replace(build, resistor_tolerance=resistor, capacitor_tolerance=capacitor)


def op_amps_for(build: Build, catalogue: Catalogue) -> list[str]:
    """The build's op amp, then others of the catalogue that take its supply; no stand-ins for a class of parts."""
    total = build.supply[1] - build.supply[0]
    names = [
        name for name, part in catalogue.op_amps.items()
        if part.si("supply_min") <= total <= part.si("supply_max")
        and not name.startswith(CLASS)
    ]  # fmt: skip
    return list(dict.fromkeys((build.op_amp, *names)))[:MOST_OP_AMPS]


def _on_supply(build: Build, supply: tuple[float, float], reference_stated: bool) -> Build:
    """The build on other rails, with the reference that a file of these rails gets."""
    if supply == build.supply:
        return build
    reference = None if reference_stated else reference_for_supply(supply)
    return replace(build, supply=supply, reference=reference or build.reference)


def _other_supply(build: Build, catalogue: Catalogue, reference_stated: bool) -> list[Build]:
    """The build on the first other usual supply that its op amp takes."""
    part = catalogue.op_amps.get(build.op_amp)
    for supply in SUPPLIES if part is not None else ():
        total = supply[1] - supply[0]
        if supply != build.supply and part is not None and part.si("supply_min") <= total <= part.si("supply_max"):
            return [_on_supply(build, supply, reference_stated)]
    return []


def other_speeds(build: Build, window: tuple[float, float], chosen: float, second: float) -> Iterator[str | float]:
    """Speeds to compare with the one planned: the other way to choose it, then a slower and a faster one.

    Parameters
    ----------
    window, chosen
        Of the plan as the file asks for it [circuit s per unit of problem time].
    second
        Seconds in one unit of problem time.
    """
    low, high = window
    there = [chosen]
    if build.speed != "free":
        yield "free"
    elif low <= second <= high and _apart(second, there):
        there.append(second)
        yield "real time"
    for scale in (min(chosen * SPEED_STEP, high), max(chosen / SPEED_STEP, low)):
        if low <= high and _apart(scale, there):
            there.append(scale)
            yield float(f"{second / scale:.2g}")


def _apart(scale: float, there: Sequence[float]) -> bool:
    return all(max(scale / other, other / scale) >= APART for other in there)
