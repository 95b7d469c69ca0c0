"""Every figure that limits the speed: which end, which stage, which part, how large, and the time scale it allows.

At the fast end bandwidth, slew rate and the smallest values stand in the way; at the slow end the largest values, bias
currents, and what networks of three resistors make of offsets and finite gain.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from math import pi

import numpy as np
from numpy.typing import NDArray

from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.quantity import engineering
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.networks import exact_into, largest_transfer
from patchplan.sizing.records import SpeedLimit, Target
from patchplan.sizing.speed_errors import (
    comfortable_capacitors,
    integrator_gains,
    late_stages,
    middle_scales,
)

Array = NDArray[np.float64]
#: Predicted error of one cause, as a fraction of peak, at which it ends the window.
END_ERROR = 0.01
#: A node may use this share of the slew rate.
SLEW_USE = 0.5
#: Limits of one kind that are kept, the tightest ones.
MOST_OF_A_KIND = 12
#: Time scales at which the cost of networks is evaluated, and the last of them over the first.
_POINTS, _LONGEST = 41, 1e4
_NO_LIMIT = SpeedLimit("fast", "", "", "", 0.0, "", 0.0, "nothing moves, so that nothing limits it")


@dataclass(frozen=True)
class Ground:
    """What the limits are found from; ``scales`` in volts per unit, ``gains`` times the time scale."""

    patch: Patch
    ranges: Ranges
    sensitivity: Sensitivity
    target: Target
    scales: Mapping[str, float]
    gains: Mapping[str, Array]


def ground_of(form: Form, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, target: Target) -> Ground:
    """Ground with swings at the middle of what is allowed, before values are chosen."""
    scales = middle_scales(form, patch, ranges, target)
    return Ground(patch, ranges, sensitivity, target, scales, integrator_gains(patch, scales))


def find_limits(on: Ground) -> tuple[SpeedLimit, ...]:
    """All limits, fast end first; of each end the tightest one comes first and sets the window."""
    fast = [*_bandwidth(on), *_slew(on), *_smallest(on)]
    slow = [*_largest(on), *_bias(on), *_networks(on)]
    fast = sorted(_tightest(fast, -1), key=lambda limit: -limit.time_scale)
    return (*fast, *sorted(_tightest(slow, 1), key=lambda limit: limit.time_scale))


def window_of(limits: tuple[SpeedLimit, ...]) -> tuple[SpeedLimit, SpeedLimit]:
    """The limits that set the fast and the slow end."""
    fast = max((x for x in limits if x.end == "fast"), key=lambda x: x.time_scale, default=_NO_LIMIT)
    return fast, min((x for x in limits if x.end == "slow"), key=lambda x: x.time_scale)


def hard_ends(limits: tuple[SpeedLimit, ...]) -> tuple[SpeedLimit, SpeedLimit]:
    """The limits beyond which no values reach: fast and slow end, at 0 and infinity where there is none."""
    hard = tuple(x for x in limits if x.hard)
    open_end = replace(_NO_LIMIT, end="slow", time_scale=np.inf)
    return window_of((*hard, open_end))


def cost_beyond(on: Ground, limit: SpeedLimit, time_scale: float) -> str:
    """What a board pays that runs beyond a limit, in words."""
    if limit.hard:
        return "no values reach there but by a lucky choice of swings"
    if limit.figure == "slew rate":
        return f"a node then asks for {100 * SLEW_USE * limit.time_scale / time_scale:.3g} % of the slew rate"
    if limit.figure in ("offset", "open-loop gain"):
        costs = _network_costs(on, network_conductance(on, np.array([time_scale])))
        share = float(costs[limit.figure == "open-loop gain"].max(initial=0.0))
    else:
        share = END_ERROR * max(time_scale / limit.time_scale, limit.time_scale / time_scale)
    return (
        f"this alone costs about {100 * share:.2g} % of peak there" if share < 1 else "this alone costs all of the peak"
    )


def _tightest(limits: list[SpeedLimit], sign: int) -> list[SpeedLimit]:
    kinds: dict[tuple[str, str], list[SpeedLimit]] = {}
    for limit in limits:
        kinds.setdefault((limit.part, limit.figure), []).append(limit)
    return [x for kind in kinds.values() for x in sorted(kind, key=lambda x: sign * x.time_scale)[:MOST_OF_A_KIND]]


def _bandwidth(on: Ground) -> Iterator[SpeedLimit]:
    """Lag of all op amps together, and of all multipliers."""
    costs = f"costs {100 * END_ERROR:g} % of peak"
    late, multiplies = late_stages(on.patch, on.sensitivity, on.target, on.scales)
    amp, times = on.target.op_amp, on.target.multiplier
    parts = ((~multiplies, amp.name, amp.gain_bandwidth, "gain-bandwidth"),
             (multiplies, times.name, times.bandwidth, "bandwidth"))  # fmt: skip
    for mask, part, figure, name in parts:
        if not mask.any():
            continue
        alone = np.abs(on.sensitivity.lag).max(axis=(0, 2), initial=0.0) * np.where(mask, late, 0.0)
        together = np.einsum("wst,s->wt", on.sensitivity.lag, np.where(mask, late, 0.0))
        end = float(np.abs(together).max(initial=0.0)) / END_ERROR
        stage = on.sensitivity.stages[int(np.argmax(alone))]
        yield SpeedLimit("fast", stage, part, name, figure / (2 * pi), "Hz", end, f"bandwidth of {part}, which {costs}")


def _slew(on: Ground) -> Iterator[SpeedLimit]:
    for stage in on.patch.stages:
        rate = on.ranges.nodes[stage.node].rate
        if stage.kind in ("reference", "source") or not np.isfinite(rate):
            continue
        part = on.target.multiplier if stage.kind == "multiplier" else on.target.op_amp
        end = on.scales[stage.node] * rate / (SLEW_USE * part.slew)
        text = f"slew rate of {part.name} at node {stage.node}, twice over"
        yield SpeedLimit("fast", stage.name, part.name, "slew rate", part.slew, "V/s", end, text)


def _smallest(on: Ground) -> Iterator[SpeedLimit]:
    product = on.target.resistors[0] * on.target.capacitors[0]
    for name, gains in on.gains.items():
        if gains.size:
            end = float(gains.max()) * product
            text = f"smallest resistor times smallest capacitor, {engineering(product, 's')}, at {name}"
            yield SpeedLimit("fast", name, "smallest values", "R × C", product, "s", end, text, hard=True)


def _largest(on: Ground) -> Iterator[SpeedLimit]:
    product = largest_transfer(on.target.resistors) * on.target.capacitors[-1]
    for name, gains in on.gains.items():
        if gains.size:
            end = float(gains.min()) * product
            text = f"largest network of three resistors times largest capacitor, {engineering(product, 's')}, at {name}"
            yield SpeedLimit("slow", name, "largest values", "R × C", product, "s", end, text, hard=True)
    if not any(gains.size for gains in on.gains.values()):
        yield SpeedLimit("slow", "", "", "", 0.0, "", 1.0, "no integrator limits it")


def _bias(on: Ground) -> Iterator[SpeedLimit]:
    very_slow, bias = np.array([1e6]), on.target.op_amp.bias + on.target.switch_leakage
    moved = np.abs(on.sensitivity.rate).max(axis=(0, 2), initial=0.0)
    share = dict(zip(on.sensitivity.stages, moved.tolist(), strict=True))
    each = {}
    for name, node in _integrators(on):
        capacitor = float(comfortable_capacitors(on.gains[name], on.target, very_slow)[0])
        each[name] = bias / capacitor * 1e6 / on.scales[node] * share[name]
    slow = sum(each.values())
    if slow > 0:
        # At a very slow speed every capacitor sits at its largest, so the error is proportional to the time scale.
        name = on.target.op_amp.name
        text = f"bias current of {name} into the largest capacitor costs {100 * END_ERROR:g} % of peak"
        worst = max(each, key=lambda key: each[key])
        yield SpeedLimit("slow", worst, name, "bias current", bias, "A", 1e6 * END_ERROR / slow, text)


def _networks(on: Ground) -> Iterator[SpeedLimit]:
    """Where offsets and finite gain cost too much through networks of three, beyond what they cost anyway."""
    widest = [float(g.min()) for g in on.gains.values() if g.size]
    if not widest:
        return
    grid = min(widest) * on.target.resistors[-1] * on.target.capacitors[-1] * np.geomspace(1.0, _LONGEST, _POINTS)
    extra = network_conductance(on, grid)
    amp = on.target.op_amp
    rates, leaks = _responses(on)
    offsets, gain = _network_costs(on, extra)
    rows: list[tuple[Array, Callable[[int], Array], str, float, str, str]] = [
        (offsets, lambda k: extra[k] * np.abs(rates).max(axis=1), "offset", amp.offset, "V", "offsets"),
        (gain, lambda k: extra[k] * np.abs(leaks).max(axis=1), "open-loop gain", amp.gain, "V/V", "finite gain"),
    ]
    for cost, shares, figure, value, unit, word in rows:
        largest = cost.max(axis=1, initial=0.0)
        if largest[-1] <= END_ERROR:
            continue
        at = int(np.argmax(largest > END_ERROR))
        end = grid[at]
        if at and largest[at - 1] > 0:
            end = float(
                np.exp(np.interp(np.log(END_ERROR), np.log(largest[at - 1 : at + 1]), np.log(grid[at - 1 : at + 1])))
            )
        stage = _integrators(on)[int(np.argmax(shares(at)))][0]
        text = f"{word} of {amp.name} through networks of three resistors, at {100 * END_ERROR:g} % of peak"
        yield SpeedLimit("slow", stage, amp.name, figure, value, unit, float(end), text)


def _responses(on: Ground) -> tuple[Array, Array]:
    """What a volt per second and a leak at each integrator make of the watched signals: shapes ``(n, n_points)``."""
    rates = np.array([_of(on.sensitivity.rate, on, name) / on.scales[node] for name, node in _integrators(on)])
    return rates, np.array([on.sensitivity.leak[name].ravel() for name, _ in _integrators(on)])


def _network_costs(on: Ground, extra: Array) -> tuple[Array, Array]:
    """Error by offsets and by finite gain for each row of :func:`network_conductance` [fraction of peak]."""
    amp = on.target.op_amp
    rates, leaks = _responses(on)
    return np.sqrt((amp.offset * extra) ** 2 @ rates**2), np.abs((extra / amp.gain) @ leaks)


def network_leak(on: Ground, time_scale: float) -> Array:
    """Error that finite gain makes through networks, shape ``(n_watched, n_times)`` [fraction of peak]."""
    total = np.zeros((len(on.sensitivity.watched), len(on.sensitivity.times)))
    extra = network_conductance(on, np.array([time_scale]))[0]
    for (name, _), rate in zip(_integrators(on), extra.tolist(), strict=True):
        total += rate / on.target.op_amp.gain * on.sensitivity.leak[name] if rate else 0.0
    return total


def network_conductance(on: Ground, time_scales: Array) -> Array:
    """What summing nodes see beyond the wanted gains, by networks: sum(1/into - 1/R) * T/C of each integrator.

    Returns
    -------
    Array
        Shape ``(n_time_scales, n_integrators)`` [1/problem time]; the order of the Sensitivity's integrators.
    """
    extra = np.zeros((len(time_scales), len(_integrators(on))))
    for column, (name, _) in enumerate(_integrators(on)):
        gains = on.gains[name]
        if gains.size:
            capacitors = comfortable_capacitors(gains, on.target, time_scales)
            wanted = time_scales / (gains[:, None] * capacitors)
            seen = 1.0 / exact_into(wanted, on.target.resistors) - 1.0 / wanted
            extra[:, column] = seen.sum(axis=0) * time_scales / capacitors
    return extra


def _integrators(on: Ground) -> list[tuple[str, str]]:
    """(name, node) of the integrators that the Sensitivity knows, in its order."""
    nodes = {s.name: s.node for s in on.patch.stages if s.kind == "integrator"}
    return [(name, nodes[name]) for name in on.sensitivity.stages if name in nodes]


def _of(table: Array, on: Ground, name: str) -> Array:
    return np.asarray(table[:, on.sensitivity.stages.index(name)].ravel())
