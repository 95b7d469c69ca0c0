"""What the terminal shows of a comparison, on drawn-up figures."""

from __future__ import annotations

from dataclasses import replace

from patchplan.compare.records import Comparison, Option
from patchplan.equation.problem import Build
from patchplan.patch.naming import shortened
from patchplan.report import style
from patchplan.report.options_words import options_summary
from patchplan.report.summary import table_lines
from patchplan.report.tables import Table


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


def test_a_product_and_its_first_factor_are_told_apart():
    factor = "(1 - x - 1/5*w - 1/2*y - 3/10*z + 7/10*v - 9/10*u + 2/5*first)"
    rows = tuple((shortened(name), text, "1 V", "0.0 V", "1 %") for name, text in (
        (f"s{factor}", factor), (f"p_{factor}*x", f"{factor}*x")
    ))  # fmt: skip
    lines = table_lines(Table("Nodes", ("node", "signal", "one", "swings", "limit"), rows))
    assert max(map(len, lines)) <= 80
    texts = [line.split("  ")[2] for line in lines[1:]]
    assert texts[0] != texts[1]
    assert all(len(row[0]) <= 14 for row in rows)


def test_no_two_causes_share_a_dash():
    assert len({line["linestyle"] for line in style.CAUSE_LINES}) == len(style.CAUSE_LINES)
