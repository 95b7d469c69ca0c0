"""Pins: where every part of a package sits, and what goes to the pins that no stage uses."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import replace

from patchplan.circuit.catalogue import Catalogue, PartData
from patchplan.circuit.packages import RAILS
from patchplan.circuit.records import GROUND, Part, Pin

#: Control line of the operate and hold switches, supply of the control inputs; nets of signals have no capitals.
OPERATE, LOGIC = "OPERATE", "LOGIC"


def line_of(part: Part) -> str:
    """Control line of a switch: that of the run, or that of the step it makes."""
    if not part.control:
        return OPERATE
    node = part.nets[1] if part.closed == "high" else part.nets[0]
    return f"{node.upper()}_ON"


def with_pins(parts: Iterable[Part], catalogue: Catalogue) -> tuple[Part, ...]:
    """The parts with the pin numbers that the catalogue knows."""
    known = _known(catalogue)
    return tuple(replace(p, pins=_pins(p, known[p.model])) if p.model in known else p for p in parts)


def wiring_of(parts: Sequence[Part], catalogue: Catalogue) -> tuple[Pin, ...]:
    """Every pin of every package whose pins the catalogue knows, packages in order, pins rising.

    Parameters
    ----------
    parts
        With their pins, see :func:`with_pins`.
    """
    known = _known(catalogue)
    packages: dict[str, list[Part]] = {}
    for part in parts:
        if part.model in known and part.pins:
            packages.setdefault(part.package or part.ref, []).append(part)
    found: list[Pin] = []
    for package, inside in packages.items():
        nets = dict(_package(package, inside, known[inside[0].model]))
        found += [Pin(package, number, net) for number, net in sorted(nets.items())]
    return tuple(found)


def spare_switches(parts: Iterable[Part], catalogue: Catalogue) -> tuple[str, ...]:
    """A sentence for each package with switch sections left over."""
    used: dict[str, list[str]] = {}
    models = {}
    for part in parts:
        if part.kind == "switch":
            used.setdefault(part.package, []).append(part.section)
            models[part.package] = catalogue.switches[part.model]
    return tuple(
        f"Not used: switch {', '.join(left)} of {package}. Tie contacts and control to ground."
        for package, sections in used.items()
        if (left := [s for s in models[package].sections if s not in sections])
    )


def _known(catalogue: Catalogue) -> dict[str, PartData]:
    return {**catalogue.op_amps, **catalogue.multipliers, **catalogue.switches, **catalogue.references}


def _pins(part: Part, data: PartData) -> tuple[int, ...]:
    pins = data.pins
    if part.kind == "multiplier":
        found = tuple(pin for group in ("x", "y", "z", "w") for pin in pins.get(group, ()))
    else:
        found = tuple(pins.get(part.section or "out", ()))
    return found if len(found) == len(part.nets) else ()


def _package(package: str, parts: Sequence[Part], data: PartData) -> Iterator[tuple[int, str]]:
    """Pin number and net of all pins of one package."""
    pins = data.pins
    yield from zip(pins.get("supply", ()), RAILS, strict=False)
    yield from ((pin, GROUND) for pin in pins.get("ground", ()))
    yield from ((pin, LOGIC) for pin in pins.get("logic", ()))
    yield from ((pin, parts[0].nets[-1]) for pin in pins.get("feedback", ()))
    for part in parts:
        yield from zip(part.pins, part.nets, strict=True)
    used = {part.section: part for part in parts}
    yield from _spare(package, pins, [s for s in data.sections if s and s not in used], data.kind)
    for section, pin in zip(data.sections, pins.get("control", ()), strict=False):
        yield pin, line_of(used[section]) if section in used else GROUND


def _spare(
    package: str, pins: Mapping[str, tuple[int, ...]], sections: Iterable[str], kind: str
) -> Iterator[tuple[int, str]]:
    """Sections left over: op amps follow ground, switches lie at ground."""
    for section in sections:
        joined = f"{package}{section}_SPARE" if kind == "op_amp" else GROUND
        nets = (GROUND, joined, joined)
        yield from zip(pins[section], nets, strict=False)
