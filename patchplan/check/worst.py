"""Inputs known only by their bounds: which worst case the netlist holds, and the runs of all the others."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from patchplan.check.figures import node_peaks
from patchplan.check.records import NodePeak
from patchplan.check.simulate import Traces, simulate
from patchplan.circuit.records import Circuit
from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.reach.records import Reach, WorstCase
from patchplan.sizing.records import Sizing


def worst_of_all(reach: Reach, form: Form, patch: Patch, sizing: Sizing) -> Reach:
    """Reach with the run of that worst case as its Reference which takes the most of its node's limit.

    Its waveforms go into the netlist and the source files; the check runs the other cases too.
    """
    cases = [case for case in reach.worst if case.signal in patch.watched]
    if not cases:
        return reach
    uses = [_use(case, form, patch, sizing) for case in cases]
    first = uses.index(max(uses))
    chosen = cases[first]
    ordered = (chosen, *(case for i, case in enumerate(cases) if i != first))
    said = chosen.said
    if len(cases) > 1:
        names = ", ".join(case.signal for case in cases[:-1]) + f" and {cases[-1].signal}"
        said = (*said, f"The check runs the worst case of each of {names}; circuit.cir holds that of {chosen.signal}, "
                f"which takes the most of its limit, {100 * uses[first]:.0f} %.")  # fmt: skip
    kept = tuple(w for w in reach.warnings if not any(w in case.said for case in reach.worst))
    return replace(reach, reference=chosen.reference, worst=ordered, warnings=(*said, *kept))


def _use(case: WorstCase, form: Form, patch: Patch, sizing: Sizing) -> float:
    """Share of its limit that a case takes of the node that carries its signal."""
    scale = sizing.scales[patch.watched[case.signal]]
    signal = f"{case.signal}.out" if f"{case.signal}.out" in form.offsets else case.signal
    return abs(case.value - float(form.offsets.get(signal, 0))) * scale.volts_per_unit / scale.limit_volts


def other_runs(circuit: Circuit, cases: Sequence[WorstCase]) -> list[tuple[WorstCase, Traces]]:
    """The board under the worst case of each further signal; a run that two cases share is made once."""
    runs: dict[int, Traces] = {}
    for case in cases:
        reference = case.reference
        if id(reference) not in runs:
            times = reference.times * circuit.time_scale
            runs[id(reference)] = simulate(circuit, times=times, waveforms=reference.waveforms)
    return [(case, runs[id(case.reference)]) for case in cases]


def peaks_over(
    circuit: Circuit, first: tuple[NodePeak, ...], others: Sequence[tuple[WorstCase, Traces]]
) -> tuple[NodePeak, ...]:
    """Of each node the highest peak over all runs; ``during`` names the signal whose worst case made it."""
    worst = {peak.node: peak for peak in first}
    for case, traces in others:
        for peak in node_peaks(circuit, traces):
            if peak.peak_volts > worst[peak.node].peak_volts:
                cause = f"{peak.cause[:-1]}, under the worst case for {case.signal}." if peak.cause else ""
                worst[peak.node] = replace(peak, during=case.signal, cause=cause)
    return tuple(worst.values())
