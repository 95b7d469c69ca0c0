"""The parts catalogue: figures with unit and source, of ``parts.toml`` and of a problem's ``[part.NAME]`` tables."""

from __future__ import annotations

import difflib
import math
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction
from pathlib import Path
from typing import Any

from patchplan.errors import Fault, ProblemFaults
from patchplan.quantity import SUFFIXES, parse_quantity

#: Figures of each kind of part: key -> (unit, meaning).
FIGURES: dict[str, dict[str, tuple[str, str]]] = {
    "op_amp": {
        "supply_min": ("V", "least total supply"),
        "supply_max": ("V", "largest total supply"),
        "gain": ("V/V", "open-loop gain at DC, typical"),
        "gain_bandwidth": ("Hz", "gain-bandwidth product, typical"),
        "slew": ("V/s", "slew rate, typical"),
        "swing_low": ("V", "loss of output swing to the low rail, into the rated load"),
        "swing_high": ("V", "loss of output swing to the high rail, into the rated load"),
        "load": ("ohm", "rated load"),
        "offset": ("V", "input offset voltage, typical"),
        "offset_max": ("V", "input offset voltage, largest"),
        "bias": ("A", "input bias current, typical"),
        "bias_difference": ("A", "difference of the bias currents, typical"),
        "noise": ("V/sqrt(Hz)", "input voltage noise density"),
        "supply_current": ("A", "drawn at rest by each amplifier, typical"),
    },
    "multiplier": {
        "supply_min": ("V", "least total supply"),
        "supply_max": ("V", "largest total supply"),
        "scale": ("V", "w = x*y/scale"),
        "full_scale": ("V", "largest input and output"),
        "bandwidth": ("Hz", "small-signal bandwidth"),
        "slew": ("V/s", "slew rate, typical"),
        "swing_low": ("V", "loss of output swing to the low rail"),
        "swing_high": ("V", "loss of output swing to the high rail"),
        "load": ("ohm", "rated load"),
        "offset": ("V", "output offset, typical"),
        "offset_max": ("V", "output offset, largest"),
        "input_offset": ("V", "offset of each input, typical"),
        "scale_error": ("1", "relative error of the scale, typical"),
        "bias": ("A", "input bias current, typical"),
        "noise": ("V/sqrt(Hz)", "output noise density"),
        "supply_current": ("A", "drawn at rest, typical"),
    },
    "switch": {
        "supply_min": ("V", "least total supply"),
        "supply_max": ("V", "largest total supply"),
        "on_resistance": ("ohm", "on-resistance, typical"),
        "leakage": ("A", "leakage when open, typical"),
        "charge_injection": ("C", "charge injected when it opens, typical"),
        "supply_current": ("A", "drawn at rest, largest"),
    },
    "reference": {
        "supply_min": ("V", "least supply above ground"),
        "supply_max": ("V", "largest supply above ground"),
        "volts": ("V", "output"),
        "tolerance": ("1", "relative error of the output, largest"),
        "current": ("A", "largest output current"),
        "supply_current": ("A", "drawn at rest, typical"),
    },
}
#: Figures that mean nothing at 0.
_POSITIVE = frozenset(
    {
        "supply_max",
        "gain",
        "gain_bandwidth",
        "slew",
        "load",
        "scale",
        "full_scale",
        "bandwidth",
        "on_resistance",
        "volts",
        "current",
    }
)
#: Figures that a part of the user's own may lack: no plan hangs on them.
_OPTIONAL = frozenset({"supply_current"})
#: Keys of a part table that are no figures.
_TEXT_KEYS = ("kind", "like", "text", "source", "differential")
_PREFIXES = {"": 0, **SUFFIXES}
_SOURCE_OF_OWN = "stated in the problem file"
_FILE = Path(__file__).with_name("parts.toml")


@dataclass(frozen=True, slots=True)
class Figure:
    """One figure of a part: SI value, its unit, and where it is from."""

    value: float
    unit: str
    source: str


@dataclass(frozen=True)
class PartData:
    """One part of the catalogue.

    Attributes
    ----------
    kind
        ``op_amp``, ``multiplier``, ``switch`` or ``reference``.
    figures
        By key of :data:`FIGURES`.
    pins
        Pin numbers: sections A to D, ``supply`` (high, low) and others.
    operate, hold
        Of a switch: sections that are normally open (closed in operate) and normally closed (closed in hold).
    differential
        Of a multiplier: whether each input has a second pin that is taken off.
    """

    name: str
    kind: str
    text: str
    source: str
    figures: Mapping[str, Figure]
    pins: Mapping[str, tuple[int, ...]] = field(default_factory=dict)
    operate: tuple[str, ...] = ()
    hold: tuple[str, ...] = ()
    differential: bool = True

    def si(self, key: str) -> float:
        """Value of one figure in SI units."""
        return self.figures[key].value

    @property
    def sections(self) -> tuple[str, ...]:
        """Names of the sections in one package; ("",) of a part that is not divided."""
        return tuple(p for p in self.pins if len(p) == 1 and p.isupper()) or ("",)


@dataclass(frozen=True)
class Catalogue:
    """All known parts, by name."""

    op_amps: Mapping[str, PartData]
    multipliers: Mapping[str, PartData]
    switches: Mapping[str, PartData]
    references: Mapping[str, PartData] = field(default_factory=dict)


def load_catalogue(own_parts: Mapping[str, Mapping[str, Any]] | None = None) -> Catalogue:
    """Read the catalogue and add the parts of a problem file.

    Parameters
    ----------
    own_parts
        The ``[part.NAME]`` tables: ``kind`` (``"op amp"``, ``"multiplier"``, ``"switch"``, ``"reference"``), optionally
        ``like`` (a part whose figures hold where none is given), figures as SI numbers or text with a unit, and of a
        multiplier ``differential`` (whether its inputs are, by default true).

    Raises
    ------
    ProblemFaults
        With all faults of these tables.
    """
    data = tomllib.loads(_FILE.read_text(encoding="utf-8"))
    parts = {k: {n: _known_part(k, n, table) for n, table in data[k].items()} for k in FIGURES}
    faults: list[Fault] = []
    for name, table in (own_parts or {}).items():
        part = _own_part(name, table, parts, faults)
        if part is not None:
            # First, so that an own switch is taken before the catalogue's.
            parts[part.kind] = {name: part, **parts[part.kind]}
    if faults:
        raise ProblemFaults(faults)
    return Catalogue(parts["op_amp"], parts["multiplier"], parts["switch"], parts["reference"])


def catalogue_names() -> dict[str, list[str]]:
    """Names of the op amps and multipliers of the catalogue, for the reader of problem files."""
    data = tomllib.loads(_FILE.read_text(encoding="utf-8"))
    return {kind: list(data[kind]) for kind in ("op_amp", "multiplier")}


def figure_value(quantity: Any, unit: str) -> float:
    """SI value of a figure: a number in SI units, or text such as ``"13 V/us"``.

    Raises
    ------
    ValueError
        With a sentence on what is wrong.
    """
    if isinstance(quantity, bool) or not isinstance(quantity, int | float | str):
        raise ValueError("It is neither a number nor a text with a unit.")
    if isinstance(quantity, int | float):
        value = float(quantity)
    else:
        number, written = parse_quantity(quantity)
        power = _power_of_ten(written, unit) if written else 0
        if power is None:
            raise ValueError(f"{quantity!r} is no quantity in {unit}.")
        value = float(number * Fraction(10) ** power)
    if not math.isfinite(value) or value < 0:
        raise ValueError(f"{quantity!r} is not a finite number of at least 0.")
    return value


def _power_of_ten(written: str, unit: str) -> int | None:
    """Power of ten from a written unit to the SI unit; None where they do not match."""
    if unit == "V/s" and written.endswith("s") and "/" in written:
        top, _, bottom = written.partition("/")
        volts, seconds = _power_of_ten(top, "V"), _PREFIXES.get(bottom[:-1])
        return None if volts is None or seconds is None else volts - seconds
    return _PREFIXES.get(written.removesuffix(unit)) if written.endswith(unit) else None


def _known_part(kind: str, name: str, table: Mapping[str, Any]) -> PartData:
    source = str(table["source"])
    figures = {}
    for key, (unit, _) in FIGURES[kind].items():
        entry = table[key] if isinstance(table[key], dict) else {"value": table[key]}
        figures[key] = Figure(figure_value(entry["value"], unit), unit, entry.get("source", source))
    return PartData(name, kind, str(table["text"]), source, figures, **_layout(table))


def _layout(table: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "pins": {k: tuple(v) for k, v in table.get("pins", {}).items()},
        "operate": tuple(table.get("operate", ())),
        "hold": tuple(table.get("hold", ())),
        "differential": table.get("differential", True),
    }


def _own_part(
    name: str, table: Mapping[str, Any], parts: Mapping[str, Mapping[str, PartData]], faults: list[Fault]
) -> PartData | None:
    """One part of the problem file; None, with faults added, where it cannot be used."""
    key = f"part.{name}"
    before = len(faults)
    if not isinstance(table, Mapping):
        faults.append(Fault(f"{name} is no table.", f"Write [part.{name}] and its figures below it.", key))
        return None
    kind = str(table.get("kind", "")).replace(" ", "_")
    if kind not in FIGURES:
        found = f"The kind of {name} is not known." if "kind" in table else f"The kind of {name} is missing."
        faults.append(Fault(found, 'Write kind = "op amp", "multiplier", "switch" or "reference".', f"{key}.kind"))
        return None
    if name in parts[kind]:
        faults.append(Fault(f"{name} is already in the catalogue.", "Give your part another name.", key))
    base = _base_part(name, table, parts[kind], faults)
    figures = dict(base.figures) if base else {}
    figures |= dict(_own_figures(name, kind, table, faults))
    missing = [k for k in FIGURES[kind] if k not in figures and k not in table and k not in _OPTIONAL]
    if missing and "like" not in table:
        remedy = 'Give them, or write like = "NAME" to take them from a part of the catalogue.'
        faults.append(Fault(f"Figures of {name} are missing: {', '.join(missing)}.", remedy, key))
    if kind != "multiplier" and "differential" in table:
        faults.append(Fault("differential is for multipliers alone.", "Take it out.", f"{key}.differential"))
    elif not isinstance(table.get("differential", True), bool):
        faults.append(Fault("differential is neither true nor false.", "Write true or false.", f"{key}.differential"))
    if len(faults) > before:
        return None
    text = str(table.get("text", name))
    differential = table.get("differential", base.differential if base else True)
    if base:
        return replace(base, name=name, text=text, source=_SOURCE_OF_OWN, figures=figures, differential=differential)
    return PartData(name, kind, text, _SOURCE_OF_OWN, figures, differential=differential)


def _base_part(
    name: str, table: Mapping[str, Any], known: Mapping[str, PartData], faults: list[Fault]
) -> PartData | None:
    if "like" not in table:
        return None
    base = known.get(str(table["like"]))
    if base is None:
        remedy = f"Name one of {', '.join(known)}."
        faults.append(Fault(f"{name} is to be like {table['like']}, which is not known.", remedy, f"part.{name}.like"))
    return base


def _own_figures(name: str, kind: str, table: Mapping[str, Any], faults: list[Fault]) -> Iterator[tuple[str, Figure]]:
    known = FIGURES[kind]
    for key, quantity in table.items():
        place = f"part.{name}.{key}"
        if key in _TEXT_KEYS:
            continue
        if key not in known:
            near = difflib.get_close_matches(key, known, 1)
            remedy = f"Did you mean {near[0]}?" if near else f"Known are {', '.join(known)}."
            faults.append(Fault(f"{key} is no figure of this kind of part.", remedy, place))
            continue
        unit, meaning = known[key]
        try:
            value = figure_value(quantity, unit)
            if value == 0 and key in _POSITIVE:
                raise ValueError("It is 0.")
            yield key, Figure(value, unit, _SOURCE_OF_OWN)
        except ValueError as error:
            faults.append(Fault(f"{key} ({meaning}) cannot be used: {error}", _example(unit), place))


def _example(unit: str) -> str:
    shown = {"V/s": '"13 V/us"', "1": '"0.5 %"', "V/V": "200000"}.get(unit, f'"3 {unit}"')
    return f"Write a number in {unit}, or text with a unit, like {shown}."
