"""The worst waveforms of inputs known only by their bounds, as recordings that a problem file can name."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.reach.records import WorstCase
from patchplan.report.codec import rounded
from patchplan.report.folder import unused_name
from patchplan.report.records import Plan

Array = NDArray[np.float64]

#: A recording's times rise, so that a jump becomes a ramp of this part of the run, around the jump's time.
_RAMP = 1e-6


def worst_names(plan: Plan) -> dict[str, str]:
    """Watched signal -> name of its file."""
    names: dict[str, str] = {}
    for case in plan.reach.worst:
        names[case.signal] = unused_name("worst", case.signal, "csv", names.values())
    return names


def worst_files(plan: Plan) -> dict[str, str]:
    """File name -> CSV text: column t [problem time], then every input known only by its bounds [problem units]."""
    names = worst_names(plan)
    return {names[case.signal]: worst_csv(case) for case in plan.reach.worst}


def worst_csv(case: WorstCase) -> str:
    """Rows of one worst case, linear in between.

    At a change of sign of the impulse response a jump and a ramp around it differ by the square of the ramp's length:
    the recording reaches the peak as well.
    """
    ramps = {name: _ramps(*waveform) for name, waveform in case.reference.waveforms.items()}
    times = np.unique(np.concatenate([t for t, _ in ramps.values()]))
    columns = [times, *(np.interp(times, *ramp) for ramp in ramps.values())]
    lines = [
        ",".join(("t", *ramps)),
        *(",".join(f"{x:.15g}" for x in row) for row in np.column_stack(columns).tolist()),
    ]
    return "\n".join(lines) + "\n"


def _ramps(times: Array, values: Array) -> tuple[Array, Array]:
    """The same waveform with every jump (two equal times) as a ramp, shorter than the way to the next."""
    jumps = np.flatnonzero(np.diff(times) == 0)
    ways = np.diff(np.concatenate((times[:1], times[jumps], times[-1:])))
    half = np.minimum(_RAMP * times[-1] / 2, np.minimum(ways[:-1], ways[1:]) / 4)
    moved = times.copy()
    moved[jumps] -= half
    moved[jumps + 1] += half
    rising = np.append(True, np.diff(moved) > 0)
    return moved[rising], values[rising]


def worst_inputs(plan: Plan) -> list[dict[str, Any]]:
    """Rows of plan.json: signal, extreme reached and when, and the file; the first is in circuit.cir."""
    names = worst_names(plan)
    return [
        {
            "signal": case.signal,
            "value_units": rounded(case.value),
            "time": rounded(case.time),
            "inputs": list(case.reference.waveforms),
            "file": names[case.signal],
        }
        for case in plan.reach.worst
    ]
