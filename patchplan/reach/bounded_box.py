"""Linear equations under bounded inputs over a box of parameters: peak gains at corners, a sample, and the worst."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System
from patchplan.reach.bounds import Ends, bounded_of, ends_of, name_rows
from patchplan.reach.box import knobs_of
from patchplan.reach.field import Field, field_of
from patchplan.reach.followed import Followed
from patchplan.reach.points import (
    axis_points,
    effort_for,
    first_points,
    knobs_at,
    parabola_points,
    parameters_at,
    steep_corners,
)
from patchplan.reach.records import Bounded, Box
from patchplan.reach.search import box_of

Array = NDArray[np.float64]

#: First step of the climb along an axis, a third of it in each further round [width of the box].
_FIRST_STEP = 0.1


def search_bounded(system: System, numeric: Field, wide: System) -> tuple[list[Bounded], Array, Array, Box]:
    """Peak gains over the box of the parameters: corners, sample, then climbing from the worst of every signal.

    A peak gain may be highest inside the box, where one resonance meets another: so every signal, slope and sum under a
    knob is followed up from the point where it is worst so far.

    Parameters
    ----------
    system
        The System that is planned, in whose names and knobs the found cases are told.
    numeric
        Its Field.
    wide
        The same with uncertain parameters left open as well, or the same one; it may lack signals.

    Returns
    -------
    cases, low, high, box
        The ends over the whole box have the shape ``(n_names,)``.

    Raises
    ------
    GrowsWithoutBoundError
        With the time.
    """
    from scipy.sparse import vstack

    field = numeric if wide is system else field_of(wide)
    followed, effort = Followed(field), effort_for(wide)
    cases: list[Bounded] = []
    ends: list[Ends] = []

    def heights(points: Array) -> Array:
        """What the search drives up, of all points so far; ``points`` are those not looked at yet."""
        settings = knobs_at(wide, points)
        for j, point in enumerate(parameters_at(wide, points)):
            weights = field.weights({name: float(values[j]) for name, values in settings.items()})
            case = bounded_of(wide, field.bind(weights), knobs_of(system, point), proof=False)
            cases.append(_told(case, numeric))
            ends.append(ends_of(case, vstack((cases[-1].rows, case.slopes, _sums(case, followed, weights))).tocsr()))
        return np.stack([np.concatenate((e.high, -e.low)) for e in ends], axis=1)

    seen = first_points(wide)
    found = heights(seen)
    for i in range(effort.rounds):
        radius, centres = _FIRST_STEP / 3**i, found.argmax(axis=1)
        near = axis_points(seen, found, effort.climbers[1], radius)
        if len(wide.adjustable) > effort.corners_up_to:
            near = np.concatenate((near, steep_corners(seen, found)[: effort.climbers[0]]))
        seen = np.concatenate((seen, near))
        found = heights(near)
        tops = parabola_points(seen, found, centres, radius)[: effort.climbers[0]]
        seen = np.concatenate((seen, tops))
        found = heights(tops)
    high, low = found[: len(numeric.names)], -found[len(ends[0].high) :][: len(numeric.names)]
    box = box_of(wide, numeric.names, low, high, parameters_at(wide, seen))
    return cases, low.min(axis=1), high.max(axis=1), box


def _told(case: Bounded, numeric: Field) -> Bounded:
    """The case with the names of the System that is planned; signals only it has follow from the states."""
    from scipy.sparse import vstack

    if case.names == numeric.names:
        return case
    own = name_rows(numeric.bind(numeric.weights(case.middle.knobs)))
    theirs = {name: i for i, name in enumerate(case.names)}
    places = [theirs.get(name, len(case.names) + i) for i, name in enumerate(numeric.names)]
    return replace(case, names=numeric.names, rows=vstack((case.rows, own)).tocsr()[places])


def _sums(case: Bounded, followed: Followed, weights: Array) -> Any:
    """Every sum under a knob as a sum of 1, states and sources."""
    from scipy.sparse import csr_array, vstack

    one = csr_array(([1.0], ([0], [0])), shape=(1, case.rows.shape[1]))
    values = vstack((one, case.rows)).tocsr()
    return csr_array(followed.sums * weights[followed.terms]) @ values[followed.factors.max(axis=0)]
