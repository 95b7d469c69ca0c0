"""Outputs that drive more inputs than they are rated for, whatever the values."""

from __future__ import annotations

from patchplan.patch.records import Patch, Stage
from patchplan.quantity import engineering
from patchplan.sizing.records import Target

#: Load of a network of three equal resistors, and of two in series, over one of them: none is lighter.
LIGHTEST_NETWORK, LIGHTEST_PAIR = 1.5, 2.0


def heavy_loads(patch: Patch, target: Target) -> list[str]:
    """A sentence for each output that is overloaded with the largest resistors, with what mends it.

    Multipliers take next to no current, so that only inputs through resistors count, and a summer's own feedback.
    """
    inputs: dict[str, int] = {}
    for stage in patch.stages:
        if stage.kind != "multiplier":
            for wire in stage.wires:
                inputs[wire.source] = inputs.get(wire.source, 0) + 1
    found = []
    for stage in patch.stages:
        own = stage.kind in ("summer", "inverter")
        if own or stage.kind == "integrator":
            sentence = _sentence(stage, inputs.get(stage.node, 0), own=own, target=target)
            found += [sentence] if sentence else []
    return found


def _sentence(stage: Stage, inputs: int, *, own: bool, target: Target) -> str:
    most, amp = target.resistors[-1], target.op_amp
    taken = (inputs + own) / LIGHTEST_PAIR if target.pairs else inputs / LIGHTEST_NETWORK + own
    if most >= amp.load * taken:
        return ""
    load, needed = most / taken, amp.load * (inputs + own)
    others = [a.name for a in target.other_op_amps if most >= a.load * (inputs + own)]
    text = (
        f"The {inputs} inputs that {stage.name} drives load it with {engineering(load, 'Ω')} even through the largest "
        f"resistors, {engineering(most, 'Ω')}; {amp.name} is rated for {engineering(amp.load, 'Ω')}. "
    )
    text += f"resistor_limits up to {engineering(needed, 'Ω')} under [build]"
    return text + (f", or op_amp = {others[0]}, would mend it." if others else " would mend it.")
