"""Trimmers as parts: a fixed resistor and a rheostat in series stand for the resistor that is trimmed."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from patchplan.circuit.knobs import TRACK_TOLERANCE, TRACKS
from patchplan.errors import CannotBuild
from patchplan.patch.records import Patch
from patchplan.quantity import engineering
from patchplan.sizing.records import Sizing, Target
from patchplan.sizing.stock import left_over, without
from patchplan.sizing.trim_records import Trimmer

#: ``model`` of the potentiometer.
TRIMMER = "trimmer"


@dataclass(frozen=True, slots=True)
class Trim:
    """Fixed resistor (0 for none) and track [ohm], and the nominal setting, 0 to 1."""

    fixed: float
    track: float
    setting: float


def fit_trim(trimmer: Trimmer, resistors: Sequence[float], tolerance: float) -> Trim:
    """The shortest track that reaches far enough either way, whatever the tolerances of both parts.

    Parameters
    ----------
    resistors, tolerance
        Values to choose the fixed resistor from [ohm], and their tolerance.

    Raises
    ------
    CannotBuild
        Where no track is long enough.
    """
    lowest, highest = trimmer.ohms * (1 - trimmer.reach), trimmer.ohms * (1 + trimmer.reach)
    fixed = max((r for r in resistors if r * (1 + tolerance) <= lowest), default=0.0)
    needed = (highest - fixed * (1 - tolerance)) / (1 - TRACK_TOLERANCE)
    track = next((t for t in TRACKS if t >= needed), None)
    if track is None:
        raise CannotBuild(
            f"A trimmer of stage {trimmer.stage} needs a track of {engineering(needed, 'Ω')}; the longest is "
            f"{engineering(TRACKS[-1], 'Ω')}. Closer tolerances or smaller resistors would mend it."
        )
    return Trim(fixed, track, (trimmer.ohms - fixed) / track)


def find_trims(patch: Patch, sizing: Sizing, target: Target) -> dict[tuple[str, int], Trim]:
    """Parts of every trimmer of the plan, fitted or suggested, by (stage, wire); parts on hand are counted."""
    if sizing.trimming is None:
        return {}
    found: dict[tuple[str, int], Trim] = {}
    left = left_over(patch, sizing, target)
    for trimmer in sizing.trimming.trimmers:
        trim = fit_trim(trimmer, left.resistors, target.resistor_tolerance)
        left = without(left, Counter([trim.fixed]))
        found[trimmer.stage, trimmer.wire] = trim
    return found
