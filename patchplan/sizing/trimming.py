"""Trimmers: which resistors to make adjustable, in which order to set them, and what to watch meanwhile.

Every part's tolerance moves the watched signals along one response; a trimmed resistor moves them along its own. A set
of trimmers takes up what lies in the span of their responses. The fewest are sought that leave little of the spread:
forward selection (orthogonal least squares; Chen, Billings and Luo 1989), then all smaller sets where they are few
enough; the singular values prove how few there can be (Eckart and Young 1936).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.readings import MOST_ROUNDS, find_readings, left_by, moves_for, smallest_set, spread_at
from patchplan.sizing.records import Leg, Sizing, Target
from patchplan.sizing.tolerances import tolerance_columns
from patchplan.sizing.trim_records import Trimmer, Trimming

Array = NDArray[np.float64]
#: Trimmers leave at most this share of the spread or, where that is more, one of which so many standard deviations are
#: the error accepted.
LEFT, DEVIATIONS = 0.05, 3.0
#: One more trimmer leaves at most this share of the spread.
WORTH_ONE_MORE = 0.8
#: Boards with more wires are not looked at; points in time over all watched signals.
MOST_WIRES, MOST_POINTS = 150, 300
#: What a trimmer's reach exceeds worst-case tolerances by.
MARGIN = 1.1
#: A signal that stands below this share of its peak crosses zero there.
_ZERO = 0.01
#: Singular values below this share of the largest are none.
RANK = 1e-6


@dataclass(frozen=True)
class _Places:
    """Resistors that may become trimmers: (stage, wire, nominal ohms), and responses ``(n_points, n_places)``."""

    names: tuple[tuple[str, int, float], ...]
    responses: Array


def find_trimming(
    form: Form, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, sizing: Sizing, target: Target,
    *, accept: float = 5.0, fitted: bool = False,
) -> Trimming | None:  # fmt: skip
    """The smallest set of trimmers that takes up what tolerances do, in setting order.

    Parameters
    ----------
    sensitivity
        Up to the horizon, where there is one.
    accept
        Error allowed [% of peak]: a spread well below it does not matter.
    fitted
        Whether the board is to have them.

    Returns
    -------
    Trimming or None
        None where nothing is watched or the board is too large to be looked at.
    """
    if not sensitivity.watched or not sensitivity.wires or len(sensitivity.wires) > MOST_WIRES:
        return None
    stride = max(1, -(-len(sensitivity.watched) * len(sensitivity.times) // MOST_POINTS))

    def flat(response: Array) -> Array:
        return response[:, ::stride].ravel()

    causes = tolerance_columns(sensitivity, patch, sizing, target)
    parts = np.array([flat(x) for list_ in causes.values() for x in list_]).T
    places = _places(sensitivity, patch, sizing, flat)
    if not parts.size or not places.names:
        return None
    left, size, _ = np.linalg.svd(parts, full_matrices=False)
    columns = left[:, size > RANK * size[0]] * size[size > RANK * size[0]]  # the same spread at every point
    before = spread_at(columns)
    allowed = max(LEFT * before, accept / 100.0 / DEVIATIONS)
    loops = int(np.linalg.matrix_rank(places.responses, tol=RANK * np.linalg.norm(places.responses, 2)))
    kept, points, least, rounds, after = _settling(places.responses, columns, allowed, loops)
    if not kept:
        return Trimming((), loops, least, 0, before, before)
    reach = MARGIN * sqrt(3.0) * np.abs(moves_for(places.responses[:, kept], parts, points)).sum(axis=1)
    per_signal = -(-len(sensitivity.times) // stride)
    trimmers = [
        _trimmer(places.names[place], float(r), divmod(point, per_signal), stride, sensitivity, form, patch, ranges,
                 float(places.responses[point, place]))
        for place, point, r in zip(kept, points, reach, strict=True)
    ]  # fmt: skip
    return Trimming(tuple(trimmers), loops, least, rounds, before, after, fitted)


def _settling(
    responses: Array, columns: Array, allowed: float, loops: int
) -> tuple[list[int], list[int], int, int, float]:
    """Places and their points in setting order, fewest places, rounds, and the spread left.

    Readings at single points take up less than the best fit would, so that a set may have to fit closer; a set that
    does not settle when it is set one after the other is no help.
    """
    best: tuple[list[int], list[int], int, float] = ([], [], 0, spread_at(columns))
    least, sizes = 0, set[int]()
    for closer in (1.0, 0.7, 0.5, 0.35, 0.25):
        chosen, fewest = smallest_set(responses, columns, closer * allowed, loops)
        least = fewest if closer == 1.0 else least
        for size in range(1, len(chosen) + 1) if closer == 1.0 else [len(chosen)]:
            if size in sizes:
                continue
            sizes.add(size)
            part = chosen if size == len(chosen) else chosen[:size]
            order, found, rounds = find_readings(responses[:, part], columns)
            kept = [part[i] for i in order]
            left = left_by(responses[:, kept], columns, found)
            if rounds <= MOST_ROUNDS and left < WORTH_ONE_MORE ** (size - len(best[0])) * best[3]:
                best = kept, found, rounds, left
            if best[3] <= allowed:
                break
        if best[3] <= allowed:
            break
    kept, found, rounds, left = best
    return kept, found, least, rounds, left


def trimmed_by(
    trimming: Trimming | None, sensitivity: Sensitivity, patch: Patch, sizing: Sizing
) -> Callable[[Array], Array]:
    """What is left of a response, ``(n_watched, n_times)``, once the trimmers on the board are set."""
    if trimming is None or not trimming.fitted or not trimming.trimmers:
        return lambda response: response
    stages = {s.name: s for s in patch.stages}
    own = np.array([_response(sensitivity, sizing, stages[t.stage], t.wire) for t in trimming.trimmers])
    rows = np.array([sensitivity.watched.index(t.watch) for t in trimming.trimmers])
    at = np.array([int(np.argmin(np.abs(sensitivity.times - t.time))) for t in trimming.trimmers])
    seen = own[:, rows, at].T

    def left(response: Array) -> Array:
        rest: Array = response - np.tensordot(np.linalg.solve(seen, response[rows, at]), own, axes=1)
        return rest

    return left


def with_trimmers(patch: Patch, sensitivity: Sensitivity, sizing: Sizing) -> Sizing:
    """The sizing with trimmed resistors where they take up its own rounding as well."""
    trimming = sizing.trimming
    if trimming is None or not trimming.fitted or not trimming.trimmers:
        return sizing
    stages = {s.name: s for s in patch.stages}
    own = np.array([_response(sensitivity, sizing, stages[t.stage], t.wire).ravel() for t in trimming.trimmers]).T
    wires = {f"{stages[name].node}<-{stages[name].wires[i].source}": k for k, (name, i) in enumerate(sensitivity.wires)}
    off = np.zeros(own.shape[0])
    for row in sizing.coefficients:
        if row.at in wires:
            off += sensitivity.coefficient[:, wires[row.at]].ravel() * row.error_percent / 100.0
    # Rounding is a matter of fractions of a percent, where the responses are linear.
    shares = np.clip(np.linalg.lstsq(own, -off, rcond=RANK)[0], -0.05, 0.05)
    made, coefficients = dict(sizing.stages), {c.at: c for c in sizing.coefficients}
    trimmers = []
    for trimmer, share in zip(trimming.trimmers, shares.tolist(), strict=True):
        stage, sized = stages[trimmer.stage], made[trimmer.stage]
        ohms = trimmer.ohms * (1.0 + share)
        trimmers.append(replace(trimmer, ohms=ohms))
        if trimmer.wire < 0:
            assert sized.start is not None
            at = f"{stage.node}(0)"
            volts = sized.start_volts / (1.0 + share)
            made[stage.name] = replace(sized, start=(ohms, sized.start[1]), start_volts=volts)
        else:
            at = f"{stage.node}<-{stage.wires[trimmer.wire].source}"
            legs = tuple(Leg((ohms,)) if i == trimmer.wire else leg for i, leg in enumerate(sized.legs))
            made[stage.name] = replace(sized, legs=legs)
        if at in coefficients:
            coefficients[at] = replace(coefficients[at], realised=coefficients[at].realised / (1.0 + share))
    return replace(
        sizing, stages=made, coefficients=tuple(coefficients.values()),
        trimming=replace(trimming, trimmers=tuple(trimmers)),
    )  # fmt: skip


def _response(sensitivity: Sensitivity, sizing: Sizing, stage: Stage, wire: int) -> Array:
    """Watched signals per relative change of one resistor, ``(n_watched, n_times)``."""
    if wire < 0:
        start = sizing.stages[stage.name].start_volts / (stage.sign * sizing.scales[stage.node].volts_per_unit)
        return -start * sensitivity.start[stage.name]
    found: Array = -sensitivity.coefficient[:, sensitivity.wires.index((stage.name, wire))]
    return found


def _places(sensitivity: Sensitivity, patch: Patch, sizing: Sizing, flat: Callable[[Array], Array]) -> _Places:
    names: list[tuple[str, int, float]] = []
    responses = []
    known = set(sensitivity.wires)
    for stage in patch.stages:
        if stage.kind not in ("integrator", "summer", "inverter") or stage.bipolar:
            continue
        sized = sizing.stages[stage.name]
        places = [(i, leg.resistors[0]) for i, leg in enumerate(sized.legs) if len(leg.resistors) == 1]
        if sized.start is not None and sized.start[0]:
            places.append((-1, sized.start[0]))
        for wire, ohms in places:
            if wire < 0 or (stage.name, wire) in known:
                names.append((stage.name, wire, ohms))
                responses.append(flat(_response(sensitivity, sizing, stage, wire)))
    # Networks of three resistors alone leave no place for a trimmer.
    return _Places(tuple(names), np.array(responses).T if names else np.zeros((0, 0)))


def _trimmer(
    place: tuple[str, int, float], reach: float, point: tuple[int, int], stride: int, sensitivity: Sensitivity,
    form: Form, patch: Patch, ranges: Ranges, effect: float,
) -> Trimmer:  # fmt: skip
    signal, index = point
    name, node = sensitivity.watched[signal], list(patch.watched.values())[signal]
    offset = float(form.offsets.get(patch.by_node()[node].signal, 0))
    values = np.interp(sensitivity.times, ranges.times, ranges.values[node]) + offset
    index *= stride
    return Trimmer(
        *place, reach, name, float(sensitivity.times[index]), float(values[index]), _figure(values, index),
        effect * float(sensitivity.base[signal]) / 100.0,
    )  # fmt: skip


def _figure(values: Array, index: int) -> str:
    """What a signal shows at one of its times."""
    near = np.abs(values[max(0, index - 3) : index + 4])
    if index == 0:
        return "start value"
    if index >= len(values) - 2:
        return "final value"
    if abs(values[index]) < _ZERO * np.abs(values).max(initial=0.0):
        return "zero crossing"
    return "peak" if np.abs(values[index]) >= near.max() else "value"
