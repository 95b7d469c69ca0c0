"""Where the board starts, and its netlist."""

from __future__ import annotations

import math
from collections.abc import Mapping

from patchplan.check.start import hold_state
from patchplan.circuit.spice import largest_step, spice_text
from patchplan.report.records import Plan


def board_of(plan: Plan) -> tuple[Mapping[str, float], str]:
    """Volts of every net at the start of the run, and circuit.cir; for a plan that was built."""
    assert plan.circuit is not None
    start = hold_state(plan.circuit, plan.reach.reference.waveforms)
    step = largest_step(plan.circuit.duration, fastest_rate(plan))
    return start, spice_text(plan.circuit, start, max_step=step, title=plan.problem.title)


def fastest_rate(plan: Plan) -> float:
    """Largest ratio of a state's rate to its peak, the angular frequency of a sine [rad/s of circuit time]."""
    nodes = [plan.ranges.nodes[s.node] for s in plan.patch.stages if s.kind == "integrator"]
    rates = [node.rate / node.peak for node in nodes if node.peak > 0 and math.isfinite(node.rate)]
    return max(rates, default=0.0) / plan.sizing.time_scale
