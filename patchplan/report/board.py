"""Where the board starts, and its netlist."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from patchplan.check.start import hold_state
from patchplan.circuit.spice import largest_step, lasting_rate, spice_text
from patchplan.report.records import Plan


def board_of(plan: Plan) -> tuple[Mapping[str, float], str]:
    """Volts of every net at the start of the run, and circuit.cir; for a plan that was built."""
    assert plan.circuit is not None
    start = hold_state(plan.circuit, plan.reach.reference.waveforms)
    step = largest_step(plan.circuit.duration, board_rate(plan), speed_gain(plan))
    return start, spice_text(plan.circuit, start, max_step=step, title=plan.problem.title)


def board_rate(plan: Plan) -> float:
    """Rate of the states over the run that the simulator's largest step is set by [rad/s of circuit time]."""
    ranges = plan.ranges
    # Half the swing, not the peak: a signal far from zero oscillates as fast as one around it.
    swings = {s.node: np.ptp(ranges.values[s.node]) / 2 for s in plan.patch.stages if s.kind == "integrator"}
    nodes = [node for node, swing in swings.items() if swing > 0]
    rates = np.array([ranges.rates[n] / swings[n] for n in nodes]).reshape(len(nodes), len(ranges.times))
    return lasting_rate(ranges.times, np.nan_to_num(rates, posinf=0.0, neginf=0.0)) / plan.sizing.time_scale


def speed_gain(plan: Plan) -> float:
    """Largest move of a watched signal, of its base, per relative change of all integrators' gains."""
    found = plan.sensitivity
    integrators = {s.name for s in plan.patch.stages if s.kind == "integrator"}
    wires = [i for i, (stage, _) in enumerate(found.wires) if stage in integrators]
    horizon = plan.verdict.horizon
    within = found.times <= (np.inf if horizon is None else horizon)
    moves = np.abs(found.coefficient[:, wires][..., within]).sum(axis=1)
    return float(moves.max(initial=0.0))
