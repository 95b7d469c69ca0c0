"""Drift: which modes hold what offsets push into them, and where a DC-limit resistor belongs."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import prod

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import System, Term
from patchplan.form.records import Form
from patchplan.patch.records import Patch, Stage
from patchplan.ranges import Ranges
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import NodeScale, StageSizing, Target

Array = NDArray[np.float64]
#: A mode slower than this many times the run, inverted, integrates what is pushed into it all through the run.
SLOW = 0.3
#: Resistance that the capacitor of a DC-limited stage is chosen for [ohm]: small, so that the corner lies low.
LIMITED = 1e4


@dataclass(frozen=True, slots=True)
class SlowMode:
    """An eigenvalue near zero [1/problem time] and the state that carries most of it."""

    eigenvalue: complex
    state: str


def slow_modes(form: Form, ranges: Ranges, patch: Patch) -> tuple[SlowMode, ...]:
    """Modes of the system, linearised at its mean, that decay by less than :data:`SLOW` over the run.

    Larger systems than 200 states are left out: their plan says so by having no note on drift.
    """
    system = form.system
    if not system.states or len(system.states) > 200:
        return ()
    by_signal = {s.signal: s.node for s in patch.stages if s.kind != "inverter"}
    mean = {n: float(np.mean(ranges.values[node])) for n, node in by_signal.items() if node in ranges.values}
    values, right = np.linalg.eig(_jacobian(system, mean))
    left = np.linalg.pinv(right).T  # rows of the inverse are the left eigenvectors; pinv for defective chains
    modes = []
    for index in np.flatnonzero(np.abs(values) * float(system.duration) < SLOW):
        share = np.abs(left[:, index] * right[:, index])
        modes.append(SlowMode(complex(values[index]), system.states[int(np.argmax(share))].name))
    return tuple(modes)


def _jacobian(system: System, at: dict[str, float]) -> Array:
    """d(rates)/d(states), kept signals followed by the chain rule, shape ``(n, n)``."""
    names = [s.name for s in system.states]
    column = {n: i for i, n in enumerate(names)}
    knobs = system.knob_values()
    gradient = {n: np.eye(len(names))[i] for n, i in column.items()}
    zero = np.zeros(len(names))

    def of(terms: tuple[Term, ...]) -> Array:
        total = zero.copy()
        for term in terms:
            factor = float(term.coefficient) * prod(knobs[k] for k in term.knobs)
            for name, power in term.factors:
                if name in gradient:
                    rest = prod(at.get(n, 0.0) ** (p - (n == name)) for n, p in term.factors)
                    total += factor * power * rest * gradient[name]
        return total

    for signal in system.signals:
        gradient[signal.name] = of(signal.terms)
    return np.array([of(row.terms) for row in system.rows])


def offset_rate(sizing: StageSizing, target: Target) -> float:
    """Volts per circuit second that typical Vos and Ib push into an integrator's output (Conant, Analog Dialogue)."""
    conductance = sum(1.0 / leg.into for leg in sizing.legs)
    return (target.op_amp.offset * conductance + target.op_amp.bias + target.switch_leakage) / sizing.capacitor


def drift_share(
    name: str, rate: float, sensitivity: Sensitivity, volts_per_unit: float, time_scale: float
) -> tuple[float, str]:
    """Largest error that a rate [V/s] at one integrator makes, as a fraction of peak, and the signal that shows it."""
    if name not in sensitivity.stages or not sensitivity.watched:
        return 0.0, ""
    moved = np.abs(sensitivity.rate[:, sensitivity.stages.index(name)]).max(axis=1)
    worst = int(np.argmax(moved))
    return float(moved[worst]) * rate * time_scale / volts_per_unit, sensitivity.watched[worst]


def limit_resistor(sizing: StageSizing, target: Target, limit: float) -> float:
    """Largest DC-limit resistor [ohm] whose settled offset stays below a twentieth of the node's limit.

    The settled offset is (1 + Rf * sum(1/R)) * Vos + Rf * Ib (Sedra and Smith, problem 2.106).
    """
    conductance = sum(1.0 / leg.into for leg in sizing.legs)
    values = np.array(target.resistors)
    settled = (1.0 + values * conductance) * target.op_amp.offset + values * target.op_amp.bias
    fits = values[settled <= limit / 20]
    return float(fits[-1]) if fits.size else float(values[0])


def dc_limited(
    stage: Stage,
    sized: StageSizing,
    scale: NodeScale,
    sensitivity: Sensitivity,
    target: Target,
    time_scale: float,
    allowed: float,
) -> StageSizing:
    """The stage with a DC-limit resistor where its drift exceeds what is allowed and the resistor does less harm."""
    rate = offset_rate(sized, target)
    share, _ = drift_share(stage.name, rate, sensitivity, scale.volts_per_unit, time_scale)
    resistor = limit_resistor(sized, target, scale.limit_volts)
    leak = np.abs(sensitivity.leak[stage.name]).max(initial=0.0) * time_scale / (resistor * sized.capacitor)
    return replace(sized, feedback=resistor) if allowed < share and leak < share else sized


def limited_stages(form: Form, patch: Patch, ranges: Ranges) -> tuple[str, ...]:
    """Integrators that get a DC-limit resistor: those that carry a mode near zero in a run without reset."""
    states = {m.state for m in slow_modes(form, ranges, patch)}
    return tuple(s.name for s in patch.stages if s.kind == "integrator" and s.signal in states)


def content_below(values: Array, times: Array, corner: float) -> float:
    """Share of a signal's content, by amplitude of its spectrum, at frequencies below ``corner`` [1/problem time]."""
    even = np.linspace(times[0], times[-1], 2048)
    # A Hann window keeps periods that do not fit the run from leaking down to where the corner is.
    spectrum = np.abs(np.fft.rfft(np.hanning(even.size) * np.interp(even, times, values)))
    frequency = np.fft.rfftfreq(even.size, even[1] - even[0])
    return float(spectrum[frequency < corner].sum() / (spectrum.sum() or 1.0))
