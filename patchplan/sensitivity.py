"""How far each watched signal moves when a coefficient, a rate, a lag or a start value is off."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage
from patchplan.patch.sums import wire_gains
from patchplan.ranges import Ranges
from patchplan.reach.curves import Curves
from patchplan.reach.linear import solve_linear
from patchplan.reach.variational import convolved, stage_times, step_maps

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Sensitivity:
    """Linear responses of the watched signals, as fractions of each watched signal's error base.

    Attributes
    ----------
    watched
        Names, length ``n_watched``.
    base
        Error base of each [problem units]: the signal's peak, or half its swing where its node carries an offset.
    times
        Shape ``(n_times,)`` [problem time]; at most a few hundred.
    wires
        (stage name, wire index): every wire of integrators, summers and inverters, and (multiplier, 0) for the gain of
        a multiplier.
    coefficient
        Shape ``(n_watched, n_wires, n_times)``: per relative change of the wire's coefficient.
    stages
        Names of integrators, summers, inverters and multipliers.
    rate
        Shape ``(n_watched, n_stages, n_times)``: integrators: per constant added to signal'
        [problem units/problem time]; other stages: per constant added to the signal at their output [problem units].
    lag
        Shape ``(n_watched, n_stages, n_times)``: per unit of problem time by which the stage's output comes late
        (integrators: by which their input sum comes late).
    start
        Integrator -> shape ``(n_watched, n_times)``: per unit added to the start value [problem units].
    leak
        Integrator -> the same shape: per unit of a rate at which it forgets its own value [1/problem time].
    """

    watched: tuple[str, ...]
    base: Array
    times: Array
    wires: tuple[tuple[str, int], ...]
    coefficient: Array
    stages: tuple[str, ...]
    rate: Array
    lag: Array
    start: Mapping[str, Array]
    leak: Mapping[str, Array] = field(default_factory=dict)


#: Times given to the caller, steps of the forward method, and rows of the Reference that one step spans at least.
TIMES, MOST_STEPS, ROWS_PER_STEP = 400, 4000, 8
#: Up to this many integrators all columns go forward in time; above, a patch without products goes by adjoints.
FORWARD_LIMIT = 40
#: Responses are kept below this, so that products of them stay finite.
_LARGEST = 1e100


def find_sensitivity(form: Form, patch: Patch, ranges: Ranges) -> Sensitivity:
    """Linear responses of the watched signals to small changes of the patch, along the nominal run.

    The patch is linearised about the nominal run (variational equations; Hairer, Norsett & Wanner 1993, Solving
    Ordinary Differential Equations I, section I.14). An integrator's input sum counts as zero before the run starts, as
    it does in hold, so that lateness also loses its first value.
    """
    plan = _Plan(form, patch, ranges)
    adjoint = len(plan.integrators) > FORWARD_LIMIT and not any(s.kind == "multiplier" for s in patch.stages)
    times, responses = _by_adjoints(plan) if adjoint else _forward(plan)
    scaled = responses / plan.base[:, None, None]
    wires, stages = len(plan.wires), len(plan.stages)
    leaks, starts = np.split(scaled[:, wires + 2 * stages :], 2, axis=1)
    return Sensitivity(
        watched=tuple(patch.watched),
        base=plan.base,
        times=times,
        wires=plan.wires,
        coefficient=scaled[:, :wires],
        stages=tuple(s.name for s in plan.stages),
        rate=scaled[:, wires : wires + stages],
        lag=scaled[:, wires + stages : wires + 2 * stages],
        start={s.name: starts[:, i] for i, s in enumerate(plan.integrators)},
        leak={s.name: leaks[:, i] for i, s in enumerate(plan.integrators)},
    )


class _Plan:
    """The patch as arrays: places of stages, parameters (columns), error bases.

    A column is one parameter: every wire, then a rate and a lag for every stage, a leak and a start value for every
    integrator.
    """

    def __init__(self, form: Form, patch: Patch, ranges: Ranges) -> None:
        self.patch = patch
        self.nodes = list(ranges.values)
        table = [np.array([curves[n] for n in self.nodes]) for curves in (ranges.values, ranges.rates)]
        self.curves = Curves(ranges.times, table[0], table[1])
        self.integrators = [s for s in patch.stages if s.kind == "integrator"]
        algebraic = [s for s in patch.stages if s.kind in ("summer", "inverter", "multiplier")]
        self.stages = [*self.integrators, *algebraic]
        self.place = {s.node: i for i, s in enumerate(self.stages)}
        self.wires = tuple((s.name, i) for s in self.stages for i in range(_counted(s)))
        every = np.arange(len(self.stages))
        #: Stage of every column, start values left out.
        counts = [_counted(s) for s in self.stages]
        self.column_stage = np.concatenate((np.repeat(every, counts), every, every, every[: len(self.integrators)]))
        self.lags = slice(len(self.wires) + len(self.stages), len(self.wires) + 2 * len(self.stages))
        self.nominal = {k.name: float(k.value) for k in patch.knobs.values()}
        self.base = np.array([self._base(form, ranges, name) for name in patch.watched])
        self.watched = tuple(patch.watched.values())

    def _base(self, form: Form, ranges: Ranges, name: str) -> float:
        """Peak of a watched signal in the problem's units, or half its swing where its node carries an offset."""
        node = self.patch.watched[name]
        offset = float(form.offsets.get(self.patch.by_node()[node].signal, 0))
        size = np.ptp(ranges.values[node]) / 2 if offset else np.abs(ranges.values[node]).max()
        return float(size) or 1.0

    def seen(self) -> Iterator[tuple[int, int]]:
        """(place among the watched, place among the stages) of watched nodes; sources and the reference never move."""
        return ((i, self.place[node]) for i, node in enumerate(self.watched) if node in self.place)

    def gains(self, stage: Stage) -> list[float]:
        """Coefficients of the counted wires, the knob at its nominal value."""
        return wire_gains(stage, self.patch, self.nominal)

    def inputs_of(self, stage: Stage, values: Mapping[str, Array]) -> Iterator[tuple[str, Array | float]]:
        """(node, slope of the stage's sum by it) for inputs that can move; ``values`` matter for products only."""
        pairs: Iterator[tuple[str, Array | float]]
        if stage.kind == "multiplier":
            first, second = (w.source for w in stage.wires)
            pairs = iter(((first, values[second]), (second, values[first])))
        elif stage.kind == "inverter":
            pairs = iter(((stage.wires[0].source, 1.0),))
        else:
            pairs = ((w.source, g) for g, w in zip(self.gains(stage), stage.wires, strict=False))
        return ((node, gain) for node, gain in pairs if node in self.place)

    def at(self, times: Array) -> tuple[dict[str, Array], dict[str, Array]]:
        """Values and rates of every node."""
        values, rates = self.curves.at(times)
        return dict(zip(self.nodes, values, strict=True)), dict(zip(self.nodes, rates, strict=True))

    def start_rises(self) -> Array:
        """Slopes that the integrators take on as the run starts, 0 for other stages, shape ``(n_stages,)``."""
        first = dict(zip(self.nodes, self.curves.rates[:, 0], strict=True))
        return np.array([first[s.node] if s.kind == "integrator" else 0.0 for s in self.stages])

    def forcings(self, values: Mapping[str, Array], rates: Mapping[str, Array]) -> Array:
        """What each column but the start values adds at its own stage: slope of an integrator, output of others.

        Parameters
        ----------
        values, rates
            Node -> shape ``(n_times,)``.

        Returns
        -------
        Array
            Shape ``(n_wires + 2 n_stages + n_integrators, n_times)``.
        """
        one = np.ones_like(next(iter(values.values())))
        rows, late = [], []
        for stage in self.stages:
            if stage.kind in ("multiplier", "inverter"):
                rows.append(values[stage.node])
            else:
                pairs = list(zip(self.gains(stage), stage.wires, strict=False))
                rows += [g * values[w.source] for g, w in pairs]
            if stage.kind == "integrator":
                late.append(sum((-g * rates[w.source] for g, w in pairs), 0 * one))
            else:
                late.append(-rates[stage.node])
        leaks = [-values[s.node] for s in self.integrators]
        return np.array([*rows, *[one] * len(self.stages), *late, *leaks])


def _counted(stage: Stage) -> int:
    return 1 if stage.kind == "multiplier" or stage.bipolar else len(stage.wires)


def _influence(plan: _Plan, values: Mapping[str, Array], count: int) -> Array:
    """How every stage's signal follows integrator states and additions at algebraic outputs.

    Shape ``(n_stages, n_times, n_stages)``; rows of integrators are unit rows.
    """
    size = len(plan.stages)
    table = np.zeros((size, count, size))
    for i, stage in enumerate(plan.stages):
        table[i, :, i] = 1.0
        for node, gain in plan.inputs_of(stage, values) if stage.kind != "integrator" else ():
            table[i] += np.reshape(gain, (-1, 1)) * table[plan.place[node]]
    return table


def _slopes(plan: _Plan, influence: Array) -> Array:
    """Slope of every state per state and per addition at algebraic outputs, ``(n_times, n, n_stages)``."""
    out = np.zeros((influence.shape[1], len(plan.integrators), len(plan.stages)))
    for i, stage in enumerate(plan.integrators):
        for node, gain in plan.inputs_of(stage, {}):
            out[:, i] += gain * influence[plan.place[node]]
    return out


def _additions(slopes: Array) -> Array:
    """Slope of every state per addition at every stage: one at an integrator is one to its own slope."""
    added = slopes.copy()
    n = slopes.shape[-2]
    added[..., :n] = np.eye(n)
    return added


def _forward(plan: _Plan) -> tuple[Array, Array]:
    """All columns at once along the run: times, and responses of shape ``(n_watched, n_columns, n_times)``."""
    curves = plan.curves
    ends = curves.coarse_ends(int(max(ROWS_PER_STEP, np.ceil(len(curves.times) / MOST_STEPS))))
    jumps = set(curves.jumps.tolist())
    n, columns = len(plan.integrators), plan.column_stage.size
    x = np.hstack((np.zeros((n, columns)), np.eye(n)))
    x[:, plan.lags] -= np.eye(n, len(plan.stages)) * plan.start_rises()
    every = max(1, int(np.ceil((len(ends) - 1) / (TIMES - 1))))
    chunk = int(np.clip(2_000_000 // (9 * (n + 1) * (n + columns)), 8, 64))
    kept = [(ends[:1], _seen_at(plan, ends[:1], x[None]))]
    for first in range(0, len(ends) - 1, chunk):
        here = ends[first : first + chunk + 1]
        maps, added = _maps(plan, here)
        states = np.empty((len(here) - 1, *x.shape))
        for k, end in enumerate(here[1:].tolist()):
            x = maps[k] @ x
            x[:, :columns] += added[k]
            states[k] = x = np.clip(x, -_LARGEST, _LARGEST)
            if end in jumps:
                x[:, plan.lags] -= _kick(plan, end)
        wanted = [k for k in range(len(here) - 1) if (first + k + 1) % every == 0 or first + k + 2 == len(ends)]
        kept.append((here[1:][wanted], _seen_at(plan, here[1:][wanted], states[wanted])))
    return np.concatenate([k[0] for k in kept]), np.concatenate([k[1] for k in kept], axis=-1)


def _maps(plan: _Plan, ends: Array) -> tuple[Array, Array]:
    """Steps between ``ends`` as x -> map x + added, ``(n_steps, n, n)`` and ``(n_steps, n, n_columns)``."""
    times = stage_times(ends)
    values, rates = plan.at(times)
    slopes = _slopes(plan, _influence(plan, values, times.size))
    maps, parts = step_maps(ends, slopes[..., : len(plan.integrators)])
    forcing = plan.forcings(values, rates).T.reshape(*parts.shape[:2], 1, -1)
    at_stages = (parts @ _additions(slopes).reshape(*parts.shape[:3], len(plan.stages)))[..., plan.column_stage]
    at_stages *= forcing
    return maps, at_stages.sum(axis=1)


def _kick(plan: _Plan, time: float) -> Array:
    """What the lag columns lose where inputs jump: for a lag T the old value lasts T longer, ``(n, n_stages)``."""
    rise, bend, after = plan.curves.jump(time)
    values = dict(zip(plan.nodes, after[:, None], strict=True))
    added = _additions(_slopes(plan, _influence(plan, values, 1)))[0]
    row = {node: i for i, node in enumerate(plan.nodes)}
    jumps = np.array([(bend if s.kind == "integrator" else rise)[row[s.node]] for s in plan.stages])
    kick: Array = added * jumps
    return kick


def _seen_at(plan: _Plan, times: Array, states: Array) -> Array:
    """Watched signals by column just before times, ``(n_watched, n_columns, n_times)``.

    ``states`` has the shape ``(n_times, n, n_columns)``.
    """
    values, rates = plan.at(np.maximum(times - 1e-12 * plan.curves.times[-1], 0.0))
    n, places = len(plan.integrators), plan.column_stage
    influence = _influence(plan, values, times.size)
    forcing = plan.forcings(values, rates)
    out = np.zeros((len(plan.watched), states.shape[2], times.size))
    for i, place in plan.seen():
        row = influence[place]
        out[i] = (row[:, None, :n] @ states)[:, 0].T
        out[i, : places.size] += np.where(places >= n, row[:, places], 0.0).T * forcing
    return np.clip(out, -_LARGEST, _LARGEST)


def _by_adjoints(plan: _Plan) -> tuple[Array, Array]:
    """Responses of a patch with constant coefficients: impulse responses to each watched signal, convolved."""
    n, duration, places = len(plan.integrators), float(plan.curves.times[-1]), plan.column_stage
    influence, slopes = _sparse_maps(plan)
    times = np.linspace(0.0, duration, TIMES)
    values, rates = plan.at(times)
    steady = plan.forcings(values, rates)
    driving = _cell_means(plan, times, values, rates)
    out = np.zeros((len(plan.watched), places.size + n, TIMES))
    for i, place in plan.seen():
        row = influence[[place]].toarray()[0]
        pieces = solve_linear(slopes[:, :n].T, row[:n], None, np.array([0.0, duration]), tolerance=1e-7)
        states, integrals = pieces.at(times), pieces.integral(times)
        kernels = np.diff(np.vstack((integrals, slopes[:, n:].T @ integrals)), axis=1)
        out[i, : places.size, 1:] = convolved(kernels, driving, places)
        out[i, : places.size] += np.where(places >= n, row[places], 0.0)[:, None] * steady
        out[i, plan.lags.start : plan.lags.start + n] -= plan.start_rises()[:n, None] * states
        out[i, places.size :] = states
    return times, out


def _cell_means(plan: _Plan, times: Array, values: Mapping[str, Array], rates: Mapping[str, Array]) -> Array:
    """Means of `forcings` over the cells between times; those of lags are differences, so that jumps count."""
    middle, middle_rates = plan.at((times[1:] + times[:-1]) / 2)
    ends = plan.forcings(values, rates)
    means = (ends[:, 1:] + ends[:, :-1] + 4 * plan.forcings(middle, middle_rates)) / 6
    late = [(rates if s.kind == "integrator" else values)[s.node] for s in plan.stages]
    means[plan.lags] = -np.diff(np.array(late), axis=1) / np.diff(times)
    return means


def _sparse_maps(plan: _Plan) -> tuple[Any, Any]:
    """`_influence` and `_slopes` of a patch without products, sparse."""
    from scipy.sparse import csr_array

    rows: list[dict[int, float]] = []
    slopes: list[dict[int, float]] = []
    for i, stage in enumerate(plan.stages):
        rows.append({i: 1.0})
        if stage.kind != "integrator":
            _add(plan, stage, rows, rows[i])
    for stage in plan.integrators:
        slopes.append({})
        _add(plan, stage, rows, slopes[-1])

    def matrix(table: list[dict[int, float]]) -> Any:
        places = np.repeat(np.arange(len(table)), [len(r) for r in table])
        columns = [c for r in table for c in r]
        return csr_array(([v for r in table for v in r.values()], (places, columns)), shape=(len(table), len(rows)))

    return matrix(rows), matrix(slopes)


def _add(plan: _Plan, stage: Stage, rows: list[dict[int, float]], total: dict[int, float]) -> None:
    for node, gain in plan.inputs_of(stage, {}):
        for column, value in rows[plan.place[node]].items():
            total[column] = total.get(column, 0.0) + float(gain) * value
