"""What the terminal shows of a comparison, on drawn-up figures."""

from __future__ import annotations

from dataclasses import replace

from patchplan.compare.records import Comparison, Option
from patchplan.equation.problem import Build
from patchplan.report.options_words import options_summary


def test_the_own_build_is_marked_and_equal_faults_are_said_once():
    own, other = Build(), replace(Build(), op_amp="OPA4140")
    slow = [
        Option(replace(Build(), op_amp=name), fault=f"No more than {end} s will do. Wider value limits would mend it.")
        for name, end in (("OPA2134", "1.5"), ("OPA2277", "20"))
    ]
    made = Comparison(
        "Rig", (Option(own, 0.5, 1.0, 20, 3, 0.01, 1.0), Option(other, 0.4, 1.0, 20, 3, 0.01, 1.0), *slow)
    )
    text = options_summary(made, own)
    marked = [line for line in text.splitlines() if line.startswith("   >")]
    assert len(marked) == 1
    assert own.op_amp in marked[0]
    assert "> is the file's own build" in text
    told = " ".join(text.split())
    assert told.count("Wider value limits would mend it.") == 1
    assert "Cannot be built: OPA2134, E24 1/2 %, ±15 V; OPA2277, E24 1/2 %, ±15 V. No more than 1.5 s will do." in told
