"""Which section of which package each stage gets, and what each package needs beside it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from patchplan.circuit.catalogue import PartData
from patchplan.circuit.records import GROUND, Part
from patchplan.patch.records import Patch, Stage

#: Rails of the board.
RAILS = ("vcc", "vee")
#: One across each rail of each package (common practice, no source) [F].
DECOUPLING = 100e-9
#: One across each rail where the supply comes in (common practice, no source) [F].
BULK = 10e-6
#: Stages that take an op amp.
WITH_OP_AMP = ("integrator", "summer", "inverter")


@dataclass(frozen=True, slots=True)
class Place:
    """A section of a package."""

    package: str
    section: str


@dataclass(frozen=True)
class Places:
    """Sections by stage name.

    Attributes
    ----------
    active
        Op amp or multiplier of each stage.
    operate, hold
        Switch sections of each integrator that is held, and of each step: closed in operate or while the step is on
        ("normally open"), closed in hold or while it is off ("normally closed").
    packages
        Designators of all packages, in order.
    notes
        Sentences on sections left over.
    """

    active: dict[str, Place]
    operate: dict[str, Place]
    hold: dict[str, Place]
    packages: tuple[str, ...]
    notes: tuple[str, ...]


def assign_places(
    patch: Patch, op_amp: PartData, multiplier: PartData, switch: PartData | None, toggled: Sequence[Stage]
) -> Places:
    """Fill packages in stage order: op amps, then multipliers, then switches.

    Parameters
    ----------
    switch
        None where the board has none.
    toggled
        Stages with a pair of switches: held integrators, then steps made from the reference.
    """
    amplified = [s for s in patch.stages if s.kind in WITH_OP_AMP]
    products = [s for s in patch.stages if s.kind == "multiplier"]
    active = _fill(amplified, op_amp.sections, 1)
    count = _last(active)
    multiplied = _fill(products, multiplier.sections, count + 1)
    count = max(count, _last(multiplied))
    operate = _fill(toggled, (switch.operate if switch else ()) or ("",), count + 1)
    hold = _fill(toggled, (switch.hold if switch else ()) or ("",), count + 1)
    if switch and not switch.hold:
        # A part with one contact: two of them for each stage.
        hold = _fill(toggled, ("",), _last(operate) + 1)
    count = max(count, _last(operate), _last(hold))
    left = op_amp.sections[len(amplified) % len(op_amp.sections) :] if len(amplified) % len(op_amp.sections) else ()
    notes = []
    if left:
        sections = f"sections {', '.join(left[:-1])} and {left[-1]}" if len(left) > 1 else f"section {left[0]}"
        notes.append(f"Not used: {sections} of U{_last(active)}. Tie minus to out and plus to ground.")
    return Places(active | multiplied, operate, hold, tuple(f"U{i}" for i in range(1, count + 1)), tuple(notes))


def counts_to_fit(parts: Iterable[Part]) -> tuple[int, int]:
    """Packages, and all pieces that have to be fitted, packages included; sources are not on the board.

    A decoupling capacitor is a piece of its own though it names the package that it stands at.
    """
    fitted = [p for p in parts if p.kind != "source"]
    packages = {p.package or p.ref for p in fitted if p.kind == "reference" or (p.package and p.kind != "decoupling")}
    apart = sum(p.kind == "decoupling" or not (p.package or p.kind == "reference") for p in fitted)
    return len(packages), len(packages) + apart


def decoupling(places: Places, references: Sequence[str]) -> Iterator[Part]:
    """Capacitors from the rails to ground for each package and where the supply comes in, without designators.

    Parameters
    ----------
    references
        Designators of the references; they use the high rail alone.
    """
    rails = [(package, rail) for package in places.packages for rail in RAILS]
    for package, rail in (*rails, *((ref, RAILS[0]) for ref in references)):
        yield Part("", "decoupling", (rail, GROUND), DECOUPLING, 0.2, package=package, model="ceramic")
    for rail in RAILS:
        yield Part("", "decoupling", (rail, GROUND), BULK, 0.2, model="electrolytic")


def _fill(stages: Sequence[Stage], sections: Sequence[str], first: int) -> dict[str, Place]:
    size = len(sections)
    return {s.name: Place(f"U{first + i // size}", sections[i % size]) for i, s in enumerate(stages)}


def _last(places: dict[str, Place]) -> int:
    return max((int(p.package[1:]) for p in places.values()), default=0)
