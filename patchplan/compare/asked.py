"""Axes of a comparison as they are written on the command line."""

from __future__ import annotations

import difflib
from collections.abc import Collection, Iterable

from patchplan.circuit.catalogue import Catalogue
from patchplan.compare.records import Axes
from patchplan.equation.wishes import SERIES
from patchplan.errors import PatchplanError
from patchplan.quantity import parse_quantity, shown


def axes_of(
    catalogue: Catalogue, *, op_amps: Iterable[str] = (), series: Iterable[str] = (), tolerances: Iterable[str] = (),
    supplies: Iterable[str] = (), speeds: Iterable[str] = (),
) -> Axes:  # fmt: skip
    """What to vary.

    Raises
    ------
    PatchplanError
        With what was found, and what was wanted.
    """
    return Axes(
        op_amps=tuple(_known(name, catalogue.op_amps, "op amp") for name in op_amps),
        series=tuple(_known(name, SERIES, "series") for name in series),
        tolerances=tuple(_tolerance(text) for text in tolerances),
        supplies=tuple(_supply(text) for text in supplies),
        speeds=tuple(_speed(text) for text in speeds),
    )


def percent_of(text: str, what: str) -> float:
    """A share such as ``1%`` or ``1``, both 1 %, in percent.

    Raises
    ------
    PatchplanError
        For anything else, and below 0.
    """
    try:
        value = float(parse_quantity(text.replace("%", ""))[0])
    except ValueError:
        value = -1.0
    if value < 0.0:
        raise PatchplanError(f"{what} is {shown(text)}, which is no percentage. Write one such as 1%.")
    return value


def _known(name: str, known: Collection[str], kind: str) -> str:
    if name in known:
        return name
    near = difflib.get_close_matches(name, known, 1, 0.5)
    remedy = f"Did you mean {near[0]}?" if near else f"Known are {', '.join(known)}."
    raise PatchplanError(f"{shown(name)} is no {kind} that is known. {remedy}")


def _tolerance(text: str) -> tuple[float, float | None]:
    resistor, _, capacitor = text.partition(",")
    tolerance = percent_of(resistor, "The tolerance") / 100.0
    return tolerance, percent_of(capacitor, "The tolerance of capacitors") / 100.0 if capacitor else None


def _supply(text: str) -> tuple[float, float]:
    try:
        volts = [float(parse_quantity(part)[0]) for part in text.removesuffix("V").split(",")]
    except ValueError:
        volts = []
    if len(volts) == 1:
        volts = [-volts[0], volts[0]]
    if len(volts) != 2 or not volts[0] <= 0.0 < volts[1]:
        raise PatchplanError(f"{shown(text)} is no supply. Write 15 for rails of -15 V and 15 V, or -5,12.")
    return volts[0], volts[1]


def _speed(text: str) -> str | float:
    if text in ("free", "real time"):
        return text
    try:
        value = float(parse_quantity(text)[0])
    except ValueError:
        value = 0.0
    if value <= 0.0:
        raise PatchplanError(
            f'{shown(text)} is no speed. Write free, "real time" or how many times faster, such as 10.'
        )
    return value
