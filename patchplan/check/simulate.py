"""The board's run: stiff integration of the full model from the start state, restarted where a source jumps."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cache
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from patchplan.check.drive import Stretch, drive_of, high_lines
from patchplan.check.implicit import Implicit, implicit_of
from patchplan.check.layout import Matrix
from patchplan.check.linear import Modes, modes_of
from patchplan.check.model import Model
from patchplan.check.network import build_network, idealised
from patchplan.check.start import start_state
from patchplan.circuit.records import Circuit

Array = NDArray[np.float64]

#: Most evaluations of the rates in one run; a board that follows its equation needs some thousands.
_MOST_EVALUATIONS = 300_000
#: Absolute error allowed, volts, for a relative tolerance of 1.
_VOLTS = 1.0
_DEFAULT_POINTS = 1001


@dataclass(frozen=True)
class Traces:
    """What the nets of a board do over a run.

    Attributes
    ----------
    times
        Shape ``(n_times,)`` [circuit s]; ends early where the run failed.
    nets
        Names of the signal nodes and of all outputs.
    volts
        Shape ``(n_nets, n_times)`` [V].
    failure
        Sentence that says when and why the run could not be finished, "" where it was.
    warnings
        Sentences about the network: floating nets, two outputs on one net.
    """

    times: Array
    nets: tuple[str, ...]
    volts: Array
    failure: str = ""
    warnings: tuple[str, ...] = field(default=())

    def of(self, net: str) -> Array:
        """Voltage of one net, shape ``(n_times,)`` [V]."""
        return np.asarray(self.volts[self.nets.index(net)])


class _TooLong(Exception):
    """The run needs more evaluations than it may have."""


def simulate(
    circuit: Circuit,
    *,
    gain: bool = True,
    bandwidth: bool = True,
    slew: bool = True,
    bias: bool = True,
    switches: bool = True,
    multiplier: bool = True,
    tolerance: float = 1e-7,
    times: Array | None = None,
    waveforms: Mapping[str, tuple[Array, Array]] | None = None,
) -> Traces:
    """Run the nominal board.

    Parameters
    ----------
    circuit
        The board; parts, nets, figures and source waveforms are all that is used.
    gain, bandwidth, slew, bias, switches, multiplier
        False takes that cause of error away, see :func:`patchplan.check.network.idealised`.
    tolerance
        Relative error of one step; as many volts are the absolute error.
    times
        Times wanted, rising [circuit s], the last one ends the run; 1001 over the whole run where None. Equal times (a
        jump) are allowed.
    waveforms
        Stand-ins for inputs known only by their bounds: name -> (times, values) in problem time and units.

    Notes
    -----
    Boards without multipliers that stay clear of their limits are run by modes, exact in time; above 150 states by a
    sparse implicit method of order 9. All others by LSODA (Petzold 1983) with the exact Jacobian up to 150 states, by
    the variable-order BDF of Shampine and Reichelt (1997) with a sparse Jacobian above.
    """
    board = idealised(circuit, gain=gain, bandwidth=bandwidth, slew=slew, bias=bias, switches=switches,
                      multiplier=multiplier)  # fmt: skip
    drive = drive_of(board, tuple(p for p in board.parts if p.kind == "source"), waveforms or {})
    wanted = np.linspace(0.0, circuit.duration, _DEFAULT_POINTS) if times is None else times
    last = float(wanted[-1]) or circuit.duration
    edges = [0.0, *(t for t in drive.jumps if t < last), last]

    @cache
    def running(high: frozenset[str]) -> _Running:
        return _running(board, high)

    done, failure, state = [], "", None
    for begin, end in pairwise(edges):
        stretch = drive.stretch(begin, end)
        now = running(high_lines(board, stretch.middle))
        if state is None:
            state = start_state(board, now.model.network, stretch.over(np.zeros(1))[:, 0])
        inside = np.clip(wanted[_rows_within(wanted, begin, end, edges[-1])], begin, end)
        states, failure = _run(now, stretch, state, np.concatenate([[begin], inside, [end]]), tolerance)
        state, kept = states[-1], min(len(inside), len(states) - 1)
        done.append(now.voltage @ states[1 : kept + 1].T + now.voltage_input @ stretch.over(inside[:kept]))
        if failure:
            break
    volts = np.concatenate(done, axis=1)
    return Traces(wanted[: volts.shape[1]], now.nets, volts, failure, now.model.network.warnings)


@dataclass(frozen=True)
class _Running:
    """The board while its control lines stand; the maps give the voltages of ``nets``."""

    model: Model
    linear: Modes | Implicit | None
    nets: tuple[str, ...]
    voltage: Matrix
    voltage_input: Matrix


def _running(board: Circuit, high: frozenset[str]) -> _Running:
    network = build_network(board, high=high)
    model = Model(network)
    rows = _rows_shown(board, network.nets)
    nets = tuple(network.nets[i] for i in rows)
    linear = implicit_of(model) if model.sparse else modes_of(model)
    return _Running(model, linear, nets, network.voltage[rows], network.voltage_input[rows])


def _rows_within(wanted: Array, begin: float, end: float, last: float) -> slice:
    """Rows of a stretch; of equal times at a jump the first row lies before it, the others after it."""
    slack = 1e-12 * last

    def after(time: float) -> int:
        row = int(np.searchsorted(wanted, time - slack))
        return row + int(row < len(wanted) and wanted[row] <= time + slack)

    return slice(after(begin) if begin else 0, after(end) if end < last else len(wanted))


def _rows_shown(circuit: Circuit, nets: tuple[str, ...]) -> list[int]:
    outputs = {p.nets[-1] for p in circuit.parts if p.kind in ("op amp", "multiplier", "source", "reference")}
    return [i for i, net in enumerate(nets) if net in circuit.nodes or net in outputs]


def _run(now: _Running, stretch: Stretch, state: Array, times: Array, tolerance: float) -> tuple[Array, str]:
    """States at ``times``, shape ``(n_times, n_states)``, fewer rows and a sentence where the run fails."""
    if not len(state):
        return np.zeros((len(times), 0)), ""
    unique, back = np.unique(times, return_inverse=True)
    found = now.linear.run(state, unique, stretch, tolerance) if now.linear is not None else None
    states, failure = found or _integrate(now.model, stretch, state, unique, tolerance)
    return states[back[: np.searchsorted(back, len(states))]], failure


def _push(model: Model, stretch: Stretch) -> Callable[[float], Array]:
    at = stretch.reader()
    if stretch.constant:
        pushed = model.push(at(0.0))
        return lambda time: pushed
    return lambda time: model.push(at(time))


def _integrate(model: Model, stretch: Stretch, state: Array, times: Array, tolerance: float) -> tuple[Array, str]:
    """The full model, step by step; fewer rows and a sentence where it fails."""
    push = _push(model, stretch)
    left = _MOST_EVALUATIONS
    reached = 0.0

    def rates(x: Array, t: float) -> Array:
        nonlocal left, reached
        left -= 1
        reached = t
        if left < 0:
            raise _TooLong
        return model.rates(x, push(t))

    def jacobian(x: Array, t: float) -> Array:
        return np.asarray(model.jacobian(x, push(t)))

    try:
        if model.sparse:
            return _integrate_sparse(model, push, rates, state, times, tolerance)
        return _integrate_dense(rates, jacobian, state, times, tolerance)
    except _TooLong:
        return state[None, :], (
            f"The run was given up at {reached:.4g} s: the board moves far faster there than its signals do. "
            "Look for positive feedback around an op amp."
        )


def _integrate_dense(
    rates: Callable[[Array, float], Array],
    jacobian: Callable[[Array, float], Array],
    state: Array,
    times: Array,
    tolerance: float,
) -> tuple[Array, str]:
    from scipy.integrate import ODEintWarning, odeint

    # A first step that is long for the fastest pole diverges more often than the method may shorten it.
    fastest = float(np.linalg.norm(jacobian(state, float(times[0])), np.inf))
    first = min(1.0 / fastest, times[-1] - times[0]) if fastest else 0.0
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ODEintWarning)
        states, info = odeint(rates, state, times, Dfun=jacobian, full_output=True, rtol=tolerance, h0=first,
                              atol=tolerance * _VOLTS, mxstep=_MOST_EVALUATIONS, tcrit=[times[-1]])  # fmt: skip
    good = np.asarray(np.isfinite(states).all(axis=1))
    good[1:] &= info["tcur"] >= times[1:] * (1.0 - 1e-12)
    count = len(times) if good.all() else int(np.argmin(good))
    failure = "" if count == len(times) else f"The integration stopped at {times[max(count - 1, 0)]:.4g} s."
    return states[: max(count, 1)], failure


def _integrate_sparse(
    model: Model,
    push: Callable[[float], Array],
    rates: Callable[[Array, float], Array],
    state: Array,
    times: Array,
    tolerance: float,
) -> tuple[Array, str]:
    from scipy.integrate import solve_ivp

    result = solve_ivp(
        lambda t, x: rates(x, t), (times[0], times[-1]), state, method="BDF", t_eval=times, rtol=tolerance,
        atol=tolerance * _VOLTS, jac=lambda t, x: model.jacobian(x, push(t)),
    )  # fmt: skip
    failure = "" if result.success else f"The integration stopped at {result.t[-1]:.4g} s."
    return result.y.T, failure
