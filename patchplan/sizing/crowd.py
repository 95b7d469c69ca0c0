"""Loop errors of many candidate boards at once, and the moves that change them.

A candidate is one place on the grid of every unknown. Loop errors and scale factors are linear in the logs of the
values, apart from what switches and the op amps' bandwidth add, which all legs of a stage share; both are kept exactly
as values move.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.model import Model
from patchplan.sizing.records import Target
from patchplan.sizing.values import Choice, Unknowns

Array = NDArray[np.float64]
Indices = NDArray[np.intp]
#: Loop errors count by this power, which is built in below: near the largest of them, yet every one still counts.
POWER = 4
#: Loop errors below this are as good as none.
FLOOR = 3e-7
_STATE = ("place", "y", "sums", "state")


@dataclass(frozen=True)
class Shared:
    """Legs that share a resistance in common: those of one integrator, or those from one switched source.

    ``capacitor`` is the integrator's column, -1 for a source; ``effect`` is what a log added to all rows does.
    """

    legs: Indices
    capacitor: int
    effect: Array


@dataclass(frozen=True)
class Field:
    """What all candidates share.

    Attributes
    ----------
    grids
        Log values of each unknown, rising.
    into
        Conductance into the bus of each value of an unknown that is a leg [S].
    effect
        What a unit of each unknown does to loop errors and theta, shape ``(n_unknowns, n_loops + n_theta)``.
    zero
        Loop errors and theta at y = 0 without shift.
    shared
        Groups; ``groups`` gives the places of an unknown's groups.
    middle, reach
        Of the bounds of theta.
    weight
        Of each loop, shape ``(n_loops,)``.
    """

    grids: tuple[Array, ...]
    into: tuple[Array, ...]
    effect: Array
    zero: Array
    shared: tuple[Shared, ...]
    groups: tuple[tuple[int, ...], ...]
    middle: Array
    reach: Array
    weight: Array
    switch_on: float
    slow: float

    @property
    def loops(self) -> Array:
        """What a unit of each unknown does to the loops, shape ``(n_unknowns, n_loops)``."""
        return self.effect[:, : len(self.weight)]

    @property
    def least(self) -> float:
        """Energy of a candidate that need not be bettered."""
        return log(2 * FLOOR)

    def energy(self, state: Array) -> Array:
        """Log of the norm of weighted loop errors and of what theta lies out of bounds; the last axis goes."""
        count = len(self.weight)
        off = np.empty(state.shape)
        np.multiply(state[..., :count], self.weight, out=off[..., :count])
        # A scale factor that has to stay inside leaves its rows off by as much as it would go beyond.
        np.maximum(np.abs(state[..., count:] - self.middle) - self.reach, 0.0, out=off[..., count:])
        # Squared twice: a general power takes ten times as long.
        squares = np.square(off, out=off)
        return np.asarray(np.log(np.einsum("...l,...l->...", squares, squares) + FLOOR**POWER) / POWER)


@dataclass
class Crowd:
    """Candidates: places on the grids, and what follows from them (first axis: candidate).

    ``state`` holds loop errors and theta, ``sums`` the conductance of each group.
    """

    field: Field
    place: Indices
    y: Array
    sums: Array
    state: Array

    @classmethod
    def at(cls, field: Field, place: Indices) -> Crowd:
        """Candidates at given places, shape ``(n_candidates, n_unknowns)``."""
        y = np.stack([grid[place[:, u]] for u, grid in enumerate(field.grids)], axis=1)
        sums = np.zeros((len(place), len(field.shared)))
        state = field.zero + y @ field.effect
        for g, group in enumerate(field.shared):
            sums[:, g] = sum(field.into[u][place[:, u]] for u in group.legs)
            state = state + _shift(field, group, sums[:, g], y[:, group.capacitor])[:, None] * group.effect
        return cls(field, place, y, sums, state)

    @property
    def errors(self) -> Array:
        """Loop errors, shape ``(n_candidates, n_loops)``."""
        return self.state[:, : len(self.field.weight)]

    def energy(self) -> Array:
        """Energy of every candidate."""
        return self.field.energy(self.state)

    def change(self, columns: Sequence[int], places: Sequence[Indices]) -> Array:
        """State if unknowns move to places of shape ``(n_candidates, n_options)`` each."""
        field = self.field
        sums: dict[int, Array] = {}
        moved: dict[int, Array] = {}
        steps, effects = [], []
        for u, where in zip(columns, places, strict=True):
            moved[u] = field.grids[u][where]
            steps.append(moved[u] - self.y[:, u, None])
            effects.append(field.effect[u])
            for g in field.groups[u]:
                total = sums.get(g, self.sums[:, g, None])
                if u != field.shared[g].capacitor:
                    total = total + field.into[u][where] - field.into[u][self.place[:, u]][:, None]
                sums[g] = total
        for g, total in sums.items():
            group = field.shared[g]
            old = self.y[:, group.capacitor, None]
            new = moved.get(group.capacitor, old) if group.capacitor >= 0 else old
            shift = _shift(field, group, total, new) - _shift(field, group, self.sums[:, g, None], old)
            steps.append(np.broadcast_to(shift, steps[0].shape))
            effects.append(group.effect)
        change: Array = np.stack(steps, axis=-1) @ np.stack(effects)
        change += self.state[:, None, :]
        return change

    def take(self, columns: Sequence[int], places: Sequence[Indices], changed: Array, option: Indices) -> None:
        """Move every candidate to one of its options."""
        every = np.arange(len(option))
        self.state = changed[every, option]
        for u, where in zip(columns, places, strict=True):
            new = where[every, option]
            for g in self.field.groups[u]:
                if u != self.field.shared[g].capacitor:
                    self.sums[:, g] += self.field.into[u][new] - self.field.into[u][self.place[:, u]]
            self.place[:, u] = new
            self.y[:, u] = self.field.grids[u][new]

    def repeated(self, count: int) -> Crowd:
        """Each candidate so many times."""
        return Crowd(self.field, *(np.repeat(getattr(self, name), count, axis=0) for name in _STATE))

    def copy(self, other: Crowd, rows: Indices, into: Indices) -> None:
        """Replace some candidates by those of another crowd."""
        for name in _STATE:
            getattr(self, name)[into] = getattr(other, name)[rows]


def _shift(field: Field, group: Shared, total: Array, capacitor: Array) -> Array:
    """Log by which a shared on-resistance and finite bandwidth make R*C larger."""
    slow = field.slow * np.exp(-capacitor) if group.capacitor >= 0 else 0.0
    return np.asarray(np.log1p(total * (field.switch_on + slow)))


def nearest_place(grid: Array, wanted: Array) -> Indices:
    """Places of the grid's values nearest to wanted logs."""
    above = np.clip(np.searchsorted(grid, wanted), 1, max(len(grid) - 1, 1))
    below = above - 1
    above = np.minimum(above, len(grid) - 1)
    return np.asarray(np.where(grid[above] - wanted < wanted - grid[below], above, below))


def make_field(
    model: Model,
    target: Target,
    unknowns: Unknowns,
    choices: Sequence[Choice],
    matrix: Array,
    constant: Array,
    shares: Array,
    weight: Array,
) -> Field:
    """Draw up what all candidates share.

    Parameters
    ----------
    choices
        Values of each unknown, the same for all candidates.
    matrix, constant
        A and b of the rows.
    shares, weight
        Of the rows in each loop, shape ``(n_rows, n_loops)``, and of each loop; any measure linear in the rows' errors
        that theta does not move may stand beside them.
    """
    # What a unit of each row's residual does. Where the rows leave theta open it stays near the middle of its bounds.
    fit = np.linalg.pinv(matrix) if matrix.shape[1] else np.zeros((0, len(constant)))
    rows = np.hstack([shares, fit.T])
    at = {name: c for c, name in enumerate(unknowns.names)}
    groups: dict[tuple[str, str], list[int]] = {}
    for row, ratio in enumerate(model.ratios):
        if ratio.kind == "integrator":
            groups.setdefault((ratio.stage, "C"), []).append(row)
        if ratio.switched:
            groups.setdefault((ratio.switched, "source"), []).append(row)
    shared = []
    for (name, what), members in groups.items():
        legs = np.array([at[model.ratios[r].stage, model.ratios[r].wire] for r in members], dtype=np.intp)
        shared.append(Shared(legs, at[name, "C"] if what == "C" else -1, rows[members].sum(axis=0)))
    places = tuple(
        tuple(g for g, s in enumerate(shared) if u in s.legs or u == s.capacitor) for u in range(len(unknowns.names))
    )
    return Field(
        grids=tuple(c.logs for c in choices),
        into=tuple(c.into if places[u] else c.logs for u, c in enumerate(choices)),
        effect=unknowns.incidence.T @ rows,
        zero=np.concatenate(
            [-constant @ rows[:, : len(weight)], model.centre - fit @ (constant + matrix @ model.centre)]
        ),
        shared=tuple(shared),
        groups=places,
        middle=model.centre,
        reach=(model.high - model.low) / 2,
        weight=weight,
        switch_on=target.switch_on,
        slow=1.0 / target.op_amp.gain_bandwidth,
    )
