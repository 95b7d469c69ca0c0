"""Where the ranges come from: how much was run, the worst point, and the margin."""

from __future__ import annotations

from typing import Any

from patchplan.reach.records import Box, WorstPoint
from patchplan.report.codec import rounded
from patchplan.report.records import Plan
from patchplan.report.words import counted, plain


def ranges_data(plan: Plan) -> dict[str, Any]:
    """The ``ranges`` table of plan.json."""
    box = plan.reach.box
    points = {point.name: point for point in box.worst} if box else {}
    rows = [
        {
            "name": found.name,
            "known_by": found.known_by,
            "reason": found.reason,
            "margin_units": rounded(found.margin),
            "worst_units": rounded(points[found.name].value) if found.name in points else None,
            "worst_at": _numbers(points[found.name]) if found.name in points else {},
        }
        for found in plan.reach.ranges.values()
    ]
    counts = {part: getattr(box, part) if box else 0 for part in ("runs", "corners", "sampled", "climbed")}
    return {
        "sentence": ranges_sentence(plan),
        "parameters": list(box.parameters) if box else [],
        **counts,
        "all_corners": box.all_corners if box else True,
        "worst_points": rows,
    }


def ranges_sentence(plan: Plan) -> str:
    """How ranges over parameters and inputs that are not known exactly were found, "" where there are none."""
    box, free = plan.reach.box, _free_inputs(plan)
    if box is None:
        return free + (_margin(plan) if free else "")
    corners = f"all {box.corners} corners" if box.all_corners else f"{box.corners} ends of axes and some corners"
    tried = f"{corners}, {box.sampled} points of a Sobol sample, {box.climbed} around the worst"
    if box.waveforms > 1:
        tried = (
            f"{corners} and {box.sampled} points of a Sobol sample under each of {box.waveforms} waveforms, "
            f"{box.climbed} around the worst"
        )
    sentence = f"Ranges hold over {', '.join(box.parameters)} by {counted(box.runs, 'run')}: {tried}."
    worst = _worst(plan, box)
    if worst is not None:
        at = ", ".join(f"{name} = {plain(value, 4)}" for name, value in worst.parameters.items())
        sentence += f" The node of {worst.name} goes furthest of its limit, to {plain(worst.value, 4)} at {at}."
    return " ".join(filter(None, (free, sentence))) + _margin(plan)


def _free_inputs(plan: Plan) -> str:
    """A sentence on inputs known only by their bounds."""
    names = [s.name for s in plan.system.sources if s.waveform is None and s.within is not None]
    if not names:
        return ""
    inputs = names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
    if not plan.system.is_linear:
        return f"The worst waveforms of {inputs} within bounds were searched; others may go further."
    ends = "".join(
        f"; {case.signal} goes to {plain(case.value, 4)} at t = {case.time:.4g}" for case in plan.reach.worst[:1]
    )
    held = "hold" if all(r.proved for case in plan.reach.bounded[:1] for r in case.responses) else "are estimated"
    return f"Ranges {held} for every waveform of {inputs} within bounds, by peak gains{ends}."


def _worst(plan: Plan, box: Box) -> WorstPoint | None:
    """Of the signals that have a node of their own, the point at which one takes the most of its limit."""
    nodes = {s.signal: s.node for s in plan.patch.stages if s.kind in ("integrator", "summer")}
    best, most = None, 0.0
    for point in box.worst:
        scale = plan.sizing.scales.get(nodes.get(point.name, ""))
        if scale is not None and abs(point.value) * scale.volts_per_unit / scale.limit_volts > most:
            best, most = point, abs(point.value) * scale.volts_per_unit / scale.limit_volts
    return best


def _margin(plan: Plan) -> str:
    shares = [r.margin / r.peak for r in plan.reach.ranges.values() if r.peak]
    if not any(shares):
        return ""
    return (
        f" Up to {100 * max(shares):.2g} % of peak is margin: how far boards with parts within tolerance go beyond the "
        "nominal one."
    )


def _numbers(point: WorstPoint) -> dict[str, float | None]:
    return {name: rounded(value) for name, value in point.parameters.items()}
