"""The input waveforms inside their bounds that drive each watched signal of a linear System furthest."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.reach.bounds import Ends, free_sources
from patchplan.reach.field import Bound
from patchplan.reach.inputs import Inputs, Stored
from patchplan.reach.nominal import solve_nominal
from patchplan.reach.records import Bounded, Reference, Response, WorstCase

Array = NDArray[np.float64]

#: At most so many watched signals get a run of their own.
MOST_CASES = 24
#: A response below this part of its peak is rounding: its sign says nothing.
_SILENT = 1e-9
#: Parts of each step in which a change of sign is looked for, and bisections that place it.
_PARTS, _BISECTIONS = 16, 45
#: A jump that belongs to the very end of the run comes this part of the run earlier.
_EARLIER = 1e-7


def worst_waveform(response: Response, row: Array, sign: float, time: float, duration: float) -> Stored:
    """The waveform inside its bounds that drives one sum of signals furthest at a time: the sign of h(time - t).

    Boyd & Barratt 1991, Linear Controller Design, chapter 5. After the time the last level stays.

    Parameters
    ----------
    row
        Weights of 1, states and sources, shape ``(1 + n_states + n_sources,)``.
    sign
        1 for upwards, -1 for downwards.
    """
    n = len(response.missed)
    turns, first = _signs(response, row[1 : 1 + n], time)
    direct = float(np.sign(row[1 + n + response.place]))
    levels = first * (-1.0) ** np.arange(turns.size + 1)
    switches, levels = time - turns[::-1], levels[::-1]
    if direct and not first:
        switches, levels = np.zeros(0), np.array([direct])
    elif direct and direct != levels[-1]:
        switches = np.append(switches, min(time, duration * (1 - _EARLIER)))
        levels = np.append(levels, direct)
    times = np.concatenate(([0.0], np.repeat(switches, 2), [duration]))
    return times, np.repeat(response.middle + response.half * sign * levels, 2)


def _signs(response: Response, weights: Array, time: float) -> tuple[Array, float]:
    """Times up to ``time`` after the impulse at which the response changes its sign, and its sign at first."""
    pieces = response.pieces
    places = pieces.starts[:, None] + pieces.lengths[:, None] * np.arange(_PARTS) / _PARTS
    times = np.append(places[places < time], time)
    curve = weights @ pieces.at(times)
    counted = np.flatnonzero(np.abs(curve) > _SILENT * np.abs(curve).max(initial=0.0))
    if not counted.size:
        return np.zeros(0), 0.0
    signs = np.sign(curve[counted])
    turns = np.flatnonzero(signs[1:] != signs[:-1])
    low, high, before = times[counted[turns]], times[counted[turns + 1]], signs[turns]
    for _ in range(_BISECTIONS if turns.size else 0):
        middle = (low + high) / 2
        same = np.sign(weights @ pieces.at(middle)) == before
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    return (low + high) / 2, float(signs[0])


def worst_cases(system: System, field: Bound, bounded: Bounded, ends: Ends) -> tuple[WorstCase, ...]:
    """The worst case of each watched signal that a free input moves, for the side on which it goes further.

    Parameters
    ----------
    ends
        Of every name.
    """
    rows = bounded.rows
    names = field.field.names
    free = {name for name, _, _ in free_sources(system)}
    targets = [names.index(name) for name, _ in system.watch if name not in free]
    moved = {r.source: [i for i in targets if _moves(r, rows[[i]].toarray()[0])] for r in bounded.responses}
    driven = [i for i in targets if any(i in rows_ for rows_ in moved.values())][:MOST_CASES]
    solved: dict[bytes, Reference] = {}
    cases = []
    for i in driven or targets[:1]:
        waveforms, said = {}, []
        for response in bounded.responses:
            mine = i if i in moved[response.source] else next(iter(moved[response.source]), None)
            waveforms[response.source] = _waveform(system, response, rows, ends, mine)
            said.append(_sentence(response, "" if mine is None else names[mine], waveforms[response.source]))
        key = b"".join(part.tobytes() for pair in waveforms.values() for part in pair)
        if key not in solved:
            inputs = Inputs(system, waveforms)
            run = solve_nominal(system, field, inputs)
            solved[key] = Reference(names, *run, tuple(inputs.edges[1:-1].tolist()), waveforms)
        up = ends.high[i] >= -ends.low[i]
        value, time = (ends.high[i], ends.high_at[i]) if up else (ends.low[i], ends.low_at[i])
        cases.append(WorstCase(names[i], float(value), float(time), solved[key], tuple(said)))
    return tuple(cases)


def _moves(response: Response, row: Array) -> bool:
    n = len(response.missed)
    return bool(row[1 + n + response.place]) or bool(np.any(response.pieces.points @ row[1 : 1 + n]))


def _waveform(system: System, response: Response, rows: Any, ends: Ends, target: int | None) -> Stored:
    duration = float(system.duration)
    if target is None:
        return np.array([0.0, duration]), np.full(2, response.middle)
    up = ends.high[target] >= -ends.low[target]
    time = float((ends.high_at if up else ends.low_at)[target])
    return worst_waveform(response, rows[[target]].toarray()[0], 1.0 if up else -1.0, time, duration)


def _sentence(response: Response, target: str, waveform: Stored) -> str:
    if target:
        return driven(response.source, f"the worst case for {target}", waveform)
    return (
        f"The input {response.source} is known by its bounds only: the check holds it at their middle, "
        f"{response.middle:.6g}, as it moves no watched signal."
    )


def driven(name: str, how: str, waveform: Stored) -> str:
    """A sentence on the waveform that stands in for an input known only by its bounds."""
    levels = np.unique(waveform[1])
    jumps = int((np.diff(waveform[1]) != 0).sum())
    shape = f"a constant {levels[0]:.6g}"
    if jumps:
        between = "between" if levels.size == 2 else f"among {levels.size} levels from"
        to = "and" if levels.size == 2 else "to"
        shape = f"{jumps} jump{'s' if jumps > 1 else ''} {between} {levels[0]:.6g} {to} {levels[-1]:.6g}"
    return f"The input {name} is known by its bounds only: the check drives it with {how}, {shape}."
