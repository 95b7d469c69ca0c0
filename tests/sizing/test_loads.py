"""Outputs with more inputs than any resistors make light enough."""

from __future__ import annotations

from patchplan.equation.reader import read_problem
from patchplan.pipeline import Choices, plan_with

LEAVES = 12


def fan(largest: str) -> str:
    """One state that many others follow."""
    rows = ['"hub\' = -hub"', *(f'"leaf{i}\' = -leaf{i} + hub"' for i in range(LEAVES))]
    return f"""equations = [{", ".join(rows)}]
watch = ["leaf0"]
duration = 5.0
[start]
hub = 1.0
{chr(10).join(f"leaf{i} = 0.0" for i in range(LEAVES))}
[build]
resistor_limits = ["1k", "{largest}"]
"""


def test_an_output_overloaded_at_any_values_is_a_fault_that_says_what_mends_it() -> None:
    """13 inputs of at most 15k each, as networks of three 10k: 1.15k, and TL07x is rated for 2k."""
    found = plan_with(read_problem(fan("10k")), Choices(think="low"))
    assert found.verdict.verdict == "not_buildable"
    (sentence,) = found.sizing.faults
    assert "13 inputs that I1 drives load it with 1.15 kΩ" in sentence
    assert "resistor_limits up to 26 kΩ under [build]" in sentence


def test_pairs_in_series_are_lighter() -> None:
    """The largest value up to 14k is 13k: pairs load the output with 2k, networks of three with 1.5k."""
    alone = plan_with(read_problem(fan("14k")), Choices(think="low"))
    paired = plan_with(read_problem(fan("14k") + "pairs = true\n"), Choices(think="low"))
    assert any("13 inputs that I1 drives" in sentence for sentence in alone.sizing.faults)
    assert not any("inputs that I1 drives" in sentence for sentence in paired.sizing.faults)


def test_what_the_sentence_asks_for_mends_it() -> None:
    found = plan_with(read_problem(fan("26k")), Choices(think="low"))
    assert not found.sizing.faults
    assert found.verdict.verdict != "not_buildable"
