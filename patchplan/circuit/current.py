"""What a board draws from its supply."""

from __future__ import annotations

from collections.abc import Mapping

from patchplan.circuit.build import output_loads
from patchplan.circuit.catalogue import Catalogue, PartData
from patchplan.circuit.records import Circuit


def supply_current(circuit: Circuit, catalogue: Catalogue, volts: Mapping[str, float]) -> float:
    """Estimate of what one rail gives [A]: all packages at rest, and every output's mean current into its load.

    An output draws from one rail at a time; that all draw from the same one is the unfavourable case.

    Parameters
    ----------
    volts
        Net -> mean magnitude over the run [V]; a net that is not named counts as 0, a reference as its volts.
    """
    loads = output_loads(circuit.parts)
    known: dict[str, Mapping[str, PartData]] = {
        "op amp": catalogue.op_amps, "multiplier": catalogue.multipliers, "switch": catalogue.switches,
        "reference": catalogue.references,
    }  # fmt: skip
    total, counted = 0.0, set()
    for part in circuit.parts:
        if part.kind not in known:
            continue
        data = known[part.kind].get(part.model)
        if data is not None and (part.package or part.ref) not in counted:
            counted.add(part.package or part.ref)
            # Sections left over draw as much as those in use.
            sections = len(data.sections) if part.kind == "op amp" else 1
            total += sections * (data.si("supply_current") if "supply_current" in data.figures else 0.0)
        if part.kind != "switch" and part.nets[-1] in loads:
            level = abs(part.value) if part.kind == "reference" else volts.get(part.nets[-1], 0.0)
            total += level / loads[part.nets[-1]]
    return total
