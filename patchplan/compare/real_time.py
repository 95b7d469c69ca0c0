"""Whether a board can run in real time: with these parts, with which others, or why not."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

from patchplan.compare.predict import predicted_error, predicted_spread
from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.quantity import engineering
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, SpeedLimit, Target
from patchplan.sizing.size import size
from patchplan.sizing.speed_limits import find_limits, ground_of, hard_ends, window_of

#: The largest film capacitor [F], the largest and smallest resistors [ohm] and the smallest capacitor [F] that are of
#: use around an op amp (common practice, no source).
FILM, LARGEST_OHM, SMALLEST_OHM, SMALLEST_FARAD = 10e-6, 10e6, 1e3, 100e-12
#: Time scales that differ by less are the same.
SAME = 1e-9

Wish = tuple[str, Target]


def on_hand(
    form: Form, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, target: Target, sizing: Sizing,
    *, run: str = "once", accept: float = 5.0,
) -> tuple[Sizing, tuple[float, float]] | None:  # fmt: skip
    """The board in real time from parts that are counted, and its predicted error and spread [% of peak].

    It is the plan where that runs in real time or cannot be built, else what a short search finds; it has faults where
    that is nothing. None where parts are not counted, or real time lies outside the window. Parameters as for
    :func:`patchplan.compare.speed_curve.speed_curve`.
    """
    unit = float(form.system.time_unit_seconds)
    if not target.stocked or not sizing.window[0] <= unit <= sizing.window[1]:
        return None
    board = sizing
    if abs(sizing.time_scale / unit - 1.0) > SAME and not sizing.faults:
        parts = (form, patch, ranges, sensitivity, target)
        board = size(*parts, speed="real time", run=run, think="low", accept=accept)
        board = replace(board, trimming=sizing.trimming)
    error, _ = predicted_error(form.system, patch, ranges, sensitivity, board, target)
    return board, (error, predicted_spread(form.system, patch, sensitivity, board, target)[0])


def judged(
    form: Form,
    patch: Patch,
    ranges: Ranges,
    sensitivity: Sensitivity,
    target: Target,
    sizing: Sizing,
    figures: tuple[float, float],
    *,
    board: Sizing | None = None,
) -> tuple[str, str]:
    """Judgement on real time, as of :class:`SpeedCurve`, and a sentence.

    Parameters
    ----------
    figures
        Predicted error and spread in real time [% of peak].
    board
        What :func:`on_hand` gives: parts that are counted may not do what the window allows.
    """
    unit = float(form.system.time_unit_seconds)
    low, high = sizing.window
    if low <= unit <= high:
        if board is not None and board.faults:
            return "with other parts", (
                "Real time lies inside the window, but no values for it were found among the parts on hand: others "
                "would be needed."
            )
        error, spread = (f"{share:.2g} %" if share < 99.5 else f"{share:.0f} %" for share in figures)
        return "possible", f"Real time is possible, with an error of {error} and a spread of {spread} as predicted."
    slow = unit > high
    limits = find_limits(ground_of(form, patch, ranges, sensitivity, target))
    soft, hard = window_of(limits)[slow], hard_ends(limits)[slow]
    out_of_reach = unit > hard.time_scale if slow else unit < hard.time_scale
    way = hard if out_of_reach else soft
    best: SpeedLimit | None = None
    for words, other in _wishes(target, slow=slow):
        others = find_limits(ground_of(form, patch, ranges, sensitivity, other))
        fast_end, slow_end = window_of(others)
        if fast_end.time_scale <= unit <= slow_end.time_scale:
            return "with other parts", f"Real time lies outside the window ({soft.text}), and inside with {words}."
        end = (hard_ends(others) if out_of_reach else (fast_end, slow_end))[slow]
        if best is None or (end.time_scale > best.time_scale) is slow:
            best = end
    least = "more" if slow else "less"
    takes = f"a unit of time would take {engineering(unit, 's')}, and no {least} than"
    known = (
        f"; with the best parts known no {least} than {engineering(best.time_scale, 's')} ({best.text})" if best else ""
    )
    if not out_of_reach:
        inside = f"{takes} {engineering(way.time_scale, 's')} lies inside ({way.text}){known}"
        return "outside", f"Real time is outside the window, where errors are larger: {inside}."
    return (
        "impossible",
        f"Real time is impossible: {takes} {engineering(way.time_scale, 's')} will do ({way.text}){known}.",
    )


def _wishes(target: Target, *, slow: bool) -> Iterator[Wish]:
    """Changes of the parts that may help, the smallest first: values, one part, both."""
    values = list(_slow_values(target) if slow else _fast_values(target))
    parts = [(f"{a.name} in place of {target.op_amp.name}", replace(target, op_amp=a)) for a in target.other_op_amps]
    if not slow:
        parts += [
            (f"{m.name} in place of {target.multiplier.name}", replace(target, multiplier=m))
            for m in target.other_multipliers
        ]
        parts += [
            (f"{a.name} and {m.name} in place of {target.op_amp.name} and {target.multiplier.name}",
             replace(target, op_amp=a, multiplier=m))
            for a in target.other_op_amps for m in target.other_multipliers
        ]  # fmt: skip
    yield from values
    yield from parts
    for words, other in values[-1:]:
        for more, with_part in parts:
            yield (
                f"{words} and {more}",
                replace(with_part, resistors=other.resistors, capacitors=other.capacitors),
            )


def _slow_values(target: Target) -> Iterator[Wish]:
    resistors, capacitors = target.resistors, target.capacitors
    large = tuple(sorted({*capacitors, *(10 * c for c in capacitors if capacitors[-1] < 10 * c <= FILM)}))
    high = tuple(sorted({*resistors, *(10 * r for r in resistors if resistors[-1] < 10 * r <= LARGEST_OHM)}))
    farad, ohm = f"capacitors up to {engineering(large[-1], 'F')}", f"resistors up to {engineering(high[-1], 'Ω')}"
    if large != capacitors:
        yield farad, replace(target, capacitors=large)
    if high != resistors:
        yield ohm, replace(target, resistors=high)
    if large != capacitors and high != resistors:
        yield f"{farad} and {ohm}", replace(target, capacitors=large, resistors=high)


def _fast_values(target: Target) -> Iterator[Wish]:
    resistors, capacitors = target.resistors, target.capacitors
    small = tuple(sorted({*capacitors, *(c / 10 for c in capacitors if SMALLEST_FARAD <= c / 10 < capacitors[0])}))
    low = tuple(sorted({*resistors, *(r / 10 for r in resistors if SMALLEST_OHM <= r / 10 < resistors[0])}))
    farad, ohm = f"capacitors down to {engineering(small[0], 'F')}", f"resistors down to {engineering(low[0], 'Ω')}"
    if small != capacitors:
        yield farad, replace(target, capacitors=small)
    if small != capacitors and low != resistors:
        yield f"{farad} and {ohm}", replace(target, capacitors=small, resistors=low)
