"""The ``[build]`` table: wishes for the board."""

from __future__ import annotations

import re
from collections.abc import Callable, Collection, Mapping
from dataclasses import fields
from fractions import Fraction
from typing import Any

from patchplan.equation.problem import Build, Stock
from patchplan.equation.reading import Reading, kind_of, nearest
from patchplan.equation.stock import read_stock
from patchplan.quantity import shown

SERIES = ("E3", "E6", "E12", "E24", "E48", "E96", "E192")
RUNS = ("once", "repeat", "free")

#: Fields of a Build that another key fills.
_FILLED = {"reference_tolerance", "resistor_stock", "capacitor_stock"}
_KEYS = tuple(f.name for f in fields(Build) if f.name not in _FILLED)
_VOLTS = ("V",)
_OHMS = ("Ω", "Ω", "ohm", "Ohm", "ohms")
_FARADS = ("F",)
#: Reference voltages [V], and the share of the nearer rail that the largest chosen one may take (common practice, no
#: source).
_REFERENCES = (10.0, 5.0, 2.5, 1.25)
_SHARE = 0.7


def read_build(reading: Reading, part_names: Mapping[str, Collection[str]] | None) -> Build:
    """The wishes; a value at fault keeps its default, with the fault noted.

    Parameters
    ----------
    reading
        The reading; its faults grow.
    part_names
        Names of the catalogue by ``"op_amp"`` and ``"multiplier"``; None leaves part names unchecked.
    """
    table = reading.table("build", reading.data.get("build", {}))
    reading.known_keys("build", table, _KEYS)
    readers: dict[str, Callable[[Reading, str, Any], Any]] = {
        "supply": _supply, "run": _run, "resistors": _series, "capacitors": _series,
        "resistor_limits": lambda r, k, v: _limits(r, k, v, _OHMS),
        "capacitor_limits": lambda r, k, v: _limits(r, k, v, _FARADS),
        "resistor_tolerance": Reading.tolerance, "capacitor_tolerance": Reading.tolerance,
        "op_amp": lambda r, k, v: _part(r, k, v, part_names), "multiplier": lambda r, k, v: _part(r, k, v, part_names),
        "speed": _speed, "pairs": _flag, "trim": _flag, "offsets": _flag, "forms": _forms,
    }  # fmt: skip
    found: dict[str, Any] = {
        key: read(reading, f"build.{key}", table[key]) for key, read in readers.items() if key in table
    }
    for kind, units in (("resistor", _OHMS), ("capacitor", _FARADS)):
        found[f"{kind}_stock"] = _stock(reading, f"build.{kind}s", found.get(f"{kind}s"), units)
    if "reference" in table:
        found["reference"], found["reference_tolerance"] = _reference(reading, table["reference"])
    elif found.get("supply"):
        found["reference"] = reference_for_supply(found["supply"])
    if "speed" not in table and reading.data.get("terminals"):
        found["speed"] = "real time"
    if found.get("pairs") and found["resistor_stock"]:
        reading.fault(
            "build.pairs", "Pairs of resistors on hand are not built in this version.",
            "Write pairs = false, or name a series under resistors.",
        )  # fmt: skip
    return Build(**{key: value for key, value in found.items() if value is not None})


def reference_for_supply(supply: tuple[float, float]) -> float | None:
    """Reference [V] that a file gets which states its rails [V] alone; None for the usual one."""
    rail = min(abs(volts) for volts in supply)
    return next((volts for volts in _REFERENCES if volts <= _SHARE * rail), None)


def _supply(reading: Reading, key: str, given: Any) -> tuple[float, float] | None:
    def volts(where: str, value: Any) -> Fraction | None:
        return reading.quantity(where, value, "volts, such as 15.0", _VOLTS)

    if isinstance(given, list):
        pair = reading.pair(key, given, volts)
        if pair is None:
            return None
        if not pair[0] <= 0 < pair[1]:
            reading.fault(key, "The rails do not enclose 0 V.", "Write [low, high] such as [-15, 15] or [0, 5].")
        return float(pair[0]), float(pair[1])
    rail = volts(key, given)
    if rail is None:
        return None
    if rail <= 0:
        reading.fault(key, "The supply is not above 0 V.", "Write 15.0 for rails of -15 V and 15 V, or [low, high].")
    return -float(rail), float(rail)


def _reference(reading: Reading, given: Any) -> tuple[float | None, float | None]:
    key, tolerance = "build.reference", None
    if isinstance(given, dict):
        reading.known_keys(key, given, ("volts", "tolerance"))
        if "tolerance" in given:
            tolerance = reading.tolerance(f"{key}.tolerance", given["tolerance"])
        if "volts" not in given:
            reading.fault(key, "The reference has no volts.", "Write { volts = 10.0 }.")
            return None, tolerance
        key, given = f"{key}.volts", given["volts"]
    return _positive(reading, key, given, "volts, such as 10.0", _VOLTS), tolerance


def _positive(reading: Reading, key: str, given: Any, wanted: str, units: Collection[str]) -> float | None:
    number = reading.quantity(key, given, wanted, units)
    if number is not None and number <= 0:
        reading.fault(key, "This is not above zero.", f"Write {wanted}.")
        return None
    return None if number is None else float(number)


def _run(reading: Reading, key: str, given: Any) -> str | None:
    text = reading.string(key, given, "once, repeat or free")
    if text is not None and text not in RUNS:
        reading.fault(key, f"Unknown run {shown(text)}.", nearest(text, RUNS))
    return text


def _series(reading: Reading, key: str, given: Any) -> str | None:
    if isinstance(given, str) and (given in SERIES or _names_file(given)):
        return reading.string(key, given, "a series or a stock file")
    if isinstance(given, str) and re.fullmatch(r"[eE]\s?\d+", given):
        reading.fault(key, f"Unknown series {shown(given)}.", nearest(given, SERIES, f"Known: {', '.join(SERIES)}."))
    elif isinstance(given, str):
        reading.fault(
            key, f"{shown(given)} is no series, and no name of a CSV file.",
            f'Write a series, {", ".join(SERIES)}, or a stock file such as "stock.csv".',
        )  # fmt: skip
    else:
        reading.fault(
            key, f"This is {kind_of(given)}.", f"Write a series in quotes, {', '.join(SERIES)}, or a stock file."
        )
    return None


def _names_file(given: str) -> bool:
    return given.lower().endswith(".csv")


def _stock(reading: Reading, key: str, given: str | None, units: Collection[str]) -> Stock | None:
    return read_stock(reading, key, given, units) if given is not None and _names_file(given) else None


def _limits(reading: Reading, key: str, given: Any, units: Collection[str]) -> tuple[float, float] | None:
    def positive(where: str, value: Any) -> Fraction | None:
        number = reading.quantity(where, value, 'a number or text such as "2k"', units)
        if number is not None and number <= 0:
            reading.fault(where, "A limit is not above zero.", "Write a positive value.")
            return None
        return number

    pair = reading.pair(key, given, positive)
    return None if pair is None else (float(pair[0]), float(pair[1]))


def _part(reading: Reading, key: str, given: Any, part_names: Mapping[str, Collection[str]] | None) -> str | None:
    text = reading.string(key, given, "the part's name")
    own = reading.data.get("part", {})
    if text is None or part_names is None:
        return text
    known = [*part_names.get(key.removeprefix("build."), ()), *(own if isinstance(own, dict) else ())]
    if text not in known:
        reading.fault(key, f"Unknown part {shown(text)}.", f"{nearest(text, known)} [part.NAME] adds your own.")
    return text


def _speed(reading: Reading, key: str, given: Any) -> str | float | None:
    if given in ("free", "real time") and isinstance(given, str):
        return given
    wanted = '"free", "real time" or a positive number'
    if isinstance(given, str) and not re.match(r"\s*[+-]?[0-9.]", given):
        reading.fault(key, f"Unknown speed {shown(given)}.", f"Write {wanted}.")
        return None
    return _positive(reading, key, given, wanted, ())


def _flag(reading: Reading, key: str, given: Any) -> bool | None:
    if isinstance(given, bool):
        return given
    reading.fault(key, f"This is {kind_of(given)}.", "Write true or false.")
    return None


def _forms(reading: Reading, key: str, given: Any) -> tuple[tuple[str, str], ...] | None:
    if not isinstance(given, dict):
        reading.fault(key, f"This is {kind_of(given)}.", 'Write { y = "cascade" }: output of a block and its form.')
        return None
    found = [(name, reading.string(f"{key}.{name}", form, "the form's name")) for name, form in given.items()]
    return tuple((name, form) for name, form in found if form is not None)
