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
    step = largest_step(plan.circuit.duration, board_rate(plan))
    return start, spice_text(plan.circuit, start, max_step=step, title=plan.problem.title)


def board_rate(plan: Plan) -> float:
    """Rate of the states over the run that the simulator's largest step is set by [rad/s of circuit time]."""
    ranges = plan.ranges
    nodes = [s.node for s in plan.patch.stages if s.kind == "integrator" and ranges.nodes[s.node].peak > 0]
    rates = np.array([ranges.rates[n] / ranges.nodes[n].peak for n in nodes]).reshape(len(nodes), len(ranges.times))
    return lasting_rate(ranges.times, np.nan_to_num(rates, posinf=0.0, neginf=0.0)) / plan.sizing.time_scale
