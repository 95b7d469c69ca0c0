"""The catalogue as text for the terminal."""

from __future__ import annotations

from patchplan.circuit.catalogue import Catalogue, PartData
from patchplan.quantity import engineering

#: Figures shown of each kind: key -> (heading, unit).
_SHOWN = {
    "op_amp": {"gain_bandwidth": ("GBW", "Hz"), "slew": ("slew", "V/µs"), "offset": ("Vos", "V"), "bias": ("Ib", "A")},
    "multiplier": {"scale": ("scale", "V"), "bandwidth": ("bandwidth", "Hz"), "scale_error": ("error", "%")},
    "switch": {"on_resistance": ("Ron", "Ω"), "leakage": ("leakage", "A")},
    "reference": {"volts": ("output", "V"), "tolerance": ("error", "%"), "current": ("current", "A")},
}


def parts_list(catalogue: Catalogue) -> str:
    """Op amps, multipliers, switches and references with their main figures, in the order of the catalogue."""
    kinds = (
        ("Op amps", catalogue.op_amps),
        ("Multipliers", catalogue.multipliers),
        ("Switches", catalogue.switches),
        ("References", catalogue.references),
    )
    lines: list[str] = []
    for heading, parts in kinds:
        lines += [heading, *(line for part in parts.values() for line in _part_lines(part)), ""]
    lines.append("Sources of the figures are in the catalogue; confirm those from memory with the maker's data sheet.")
    return "\n".join(lines) + "\n"


def _part_lines(part: PartData) -> list[str]:
    supply = f"supply {part.si('supply_min'):g} to {part.si('supply_max'):g} V"
    figures = [f"{name} {_figure(part, key, unit)}" for key, (name, unit) in _SHOWN[part.kind].items()]
    return [f"  {part.name}: {part.text}", f"    {supply}, {', '.join(figures)}"]


def _figure(part: PartData, key: str, unit: str) -> str:
    if unit == "V/µs":
        return f"{part.si(key) / 1e6:g} V/µs"
    return f"{100 * part.si(key):.2g} %" if unit == "%" else engineering(part.si(key), unit)
