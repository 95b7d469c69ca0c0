"""Error and spread against speed: the predictions of one board after another, each exact at its own speed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from patchplan.compare.predict import predicted_error, predicted_spread
from patchplan.compare.real_time import judged, on_hand
from patchplan.compare.records import SpeedCurve
from patchplan.form.records import Form
from patchplan.horizon import within_horizon
from patchplan.patch.records import Patch
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.drift import limited_stages
from patchplan.sizing.exact import exact_sizing
from patchplan.sizing.records import Sizing, Target
from patchplan.sizing.trimming import trimmed_by

Array = NDArray[np.float64]
#: Speeds across the window; large boards take fewer, at most this many stages over all speeds, but no fewer than the
#: least.
POINTS, MOST_STAGES, LEAST_POINTS = 41, 1000, 9
#: What wiring and sockets add across a capacitor or a feedback resistor [F] (common practice, no source). What they add
#: from a summing node to ground has no share in first order.
STRAY = 10e-12
#: What the resistance of a switch is off by; its nominal value is counted in R (common practice, no source).
SWITCH_OFF = 0.1


def speed_curve(
    form: Form,
    patch: Patch,
    ranges: Ranges,
    sensitivity: Sensitivity,
    target: Target,
    sizing: Sizing,
    *,
    run: str = "once",
    accept: float = 5.0,
) -> SpeedCurve:
    """Predicted error and spread over the window of the speed, and what is to be said of real time.

    Every point is a board of exact values with the scale factors of the plan; its error is what
    :func:`patchplan.compare.predict.predicted_error` gives. Tolerances and trimmers are the plan's. To the spread come
    strays, switch leakage and switches.

    Parameters
    ----------
    sizing
        The plan's: scale factors, window, limits, chosen speed, tolerances of its parts, and trimmers.
    run, accept
        As for :func:`patchplan.sizing.size.size`.
    """
    sensitivity = within_horizon(sensitivity, linear=form.system.is_linear)
    limited = limited_stages(form, patch, ranges) if run == "free" else ()
    unit = float(form.system.time_unit_seconds)
    grid = _grid(sizing, len(patch.stages))
    causes: dict[str, list[float]] = {}
    spreads: dict[str, list[float]] = {}
    totals = []
    for time_scale in (*grid, unit):
        exact = exact_sizing(
            patch, sizing.scales, target, time_scale, limited=limited, sensitivity=sensitivity, allowed=accept / 100.0
        )
        error, parts = predicted_error(form.system, patch, ranges, sensitivity, exact, target)
        spread, ways = predicted_spread(form.system, patch, sensitivity, exact, target, like=sizing)
        more = loose_ends(patch, sensitivity, replace(exact, trimming=sizing.trimming), target)
        totals.append((error, sqrt(spread**2 + sum(share**2 for share in more.values()))))
        for table, found in ((causes, {c.cause: c.error_percent for c in parts}),
                             (spreads, {c.cause: c.error_percent for c in ways} | more)):  # fmt: skip
            for cause, share in found.items():
                table.setdefault(cause, [0.0] * (len(grid) + 1))[len(totals) - 1] = share
    chosen = totals[grid.index(sizing.time_scale)]
    held = on_hand(form, patch, ranges, sensitivity, target, sizing, run=run, accept=accept)
    board, real = held or (None, totals[-1])
    real = totals[-1] if board is not None and board.faults else real
    judgement, reason = judged(form, patch, ranges, sensitivity, target, sizing, real, board=board)
    return SpeedCurve(
        grid,
        tuple(error for error, _ in totals[:-1]),
        tuple(spread for _, spread in totals[:-1]),
        _without_last(causes),
        _without_last(spreads),
        chosen,
        real,
        judgement,
        reason,
    )


def _without_last(table: dict[str, list[float]]) -> dict[str, tuple[float, ...]]:
    return {cause: tuple(shares[:-1]) for cause, shares in table.items() if any(shares[:-1])}


def _grid(sizing: Sizing, stages: int) -> tuple[float, ...]:
    """Time scales across the window, with the plan's own."""
    low, high = sorted(sizing.window)
    count = int(np.clip(MOST_STAGES // max(stages, 1), LEAST_POINTS, POINTS))
    low, high = max(low, 1e-9 * high), max(high, 1e-30)
    return tuple(sorted({*np.geomspace(low, high, count).tolist(), sizing.time_scale}))


def loose_ends(patch: Patch, sensitivity: Sensitivity, sizing: Sizing, target: Target) -> dict[str, float]:
    """What the layout and the switches may add to the spread [% of peak], by cause.

    Strays and a switch that is off move all wires of an integrator alike; across a summer's feedback a stray makes it
    late. Leakage drives an integrator as bias current does, in either direction. Trimmers take up what they can.
    """
    stages = {s.name: s for s in patch.stages}
    own: dict[str, list[int]] = {}
    for i, (name, _) in enumerate(sensitivity.wires):
        own.setdefault(name, []).append(i)
    ways: dict[str, list[Array]] = {"strays": [], "switch leakage": [], "switch resistance": []}
    for i, name in enumerate(sensitivity.stages):
        sized, kind = sizing.stages[name], stages[name].kind
        together = sensitivity.coefficient[:, own.get(name, [])].sum(axis=1)
        if kind == "integrator":
            volts = sizing.scales[stages[name].node].volts_per_unit
            leak = target.switch_leakage / sized.capacitor * sizing.time_scale / volts
            seen = sum(1.0 / leg.into for leg in sized.legs)
            ways["strays"].append(STRAY / sized.capacitor * together)
            ways["switch leakage"].append(leak * sensitivity.rate[:, i])
            ways["switch resistance"].append(SWITCH_OFF * target.switch_on * seen * together)
        elif kind != "multiplier":
            ways["strays"].append(STRAY * sized.feedback / sizing.time_scale * sensitivity.lag[:, i])
    trimmed = trimmed_by(sizing.trimming, sensitivity, patch, sizing)
    return {cause: share for cause, rows in ways.items() if (share := _largest([trimmed(row) for row in rows]))}


def _largest(rows: Sequence[Array]) -> float:
    """Largest root sum of squares over watched signals and time [%]."""
    if not rows:
        return 0.0
    return 100.0 * float(np.sqrt(sum((row**2 for row in rows), np.zeros(1))).max(initial=0.0))
