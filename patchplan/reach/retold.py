"""The nominal run told in the signals of another System with the same states."""

from __future__ import annotations

from patchplan.equation.system import System
from patchplan.reach.curves import extremes
from patchplan.reach.field import field_of
from patchplan.reach.inputs import Inputs
from patchplan.reach.nominal import tabulate
from patchplan.reach.records import Range, Reach, Reference, Run


def retold(reach: Reach, system: System) -> Reach:
    """Nominal run and its ranges for a System that only adds signals; nothing is solved again.

    Ranges hold for this one run, so that they serve comparisons and no board.
    """
    numeric, before = field_of(system), reach.reference
    bound = numeric.bind(numeric.weights(system.knob_values()))
    inputs = Inputs(system, before.waveforms)
    values, rates = tabulate(bound, inputs, before.times, before.values[: numeric.n_states])
    ends = extremes(before.times, values, rates)
    ranges = {n: Range(n, float(a), float(b), "simulated") for n, a, b in zip(numeric.names, *ends, strict=True)}
    reference = Reference(numeric.names, before.times, values, rates, before.jumps, before.waveforms)
    return Reach(reference, ranges, (Run(system.knob_values(), before.times, values, rates),))
