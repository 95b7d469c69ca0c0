"""What a person reads on the terminal."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from patchplan.check.records import Cause, NodePeak
from patchplan.report import words
from patchplan.report.folder import unused_name
from patchplan.report.pictures import MOST_POINTS, thinned
from patchplan.report.plan_json import plan_data
from patchplan.report.sheet import steps
from patchplan.report.summary import WIDTH, summary
from patchplan.report.tables import OTHER_RUNS, node_table, parts_table
from patchplan.sizing.trim_records import Trimmer, Trimming
from tests.report.test_plan_json import unbuildable


def test_summary_answers_in_order(plan):
    text = summary(plan, Path("outputs/plain"))
    wanted = [
        "Plain oscillator", "Follows the equation within 0.31 % of peak (boards spread 0.9 %)", "stays inside 12.0 V",
        "Runs 100 times faster than real time", "2 integrators, 1 inverter", "node signal", "-9.0 … 9.0 V", "75 %",
        "Largest error: gain-bandwidth of INT2, 0.22 %.", "Written to outputs/plain (start with report.html)",
    ]  # fmt: skip
    flat = " ".join(text.split())
    places = [flat.find(" ".join(phrase.split())) for phrase in wanted]
    assert -1 not in places
    assert places == sorted(places)


@pytest.mark.parametrize("name", ["seat_suspension", "lorenz"])
def test_the_count_of_parts_is_that_of_the_parts_list(plans, name):
    plan = plans.of(name)
    listed = sum(int(row[0]) for row in parts_table(plan.circuit).rows)
    assert f", {listed} parts." in words.made_of(plan)
    rows = [row for row in parts_table(plan.circuit).rows if row[1] in {"op amp", "multiplier", "switch", "reference"}]
    assert f" {sum(int(row[0]) for row in rows)} packages," in words.made_of(plan)


@pytest.mark.parametrize(
    ("fitted", "said"),
    [
        (True, "1 trimmer, set as the bring-up sheet says, takes the spread by parts from 1.7 % to 0.8 %."),
        (False, "1 trimmer would take the spread by parts from 1.7 % to 0.8 %: trim = true under [build]."),
    ],
)
def test_the_summary_says_what_trimmers_do(plan, fitted, said):
    trimmer = Trimmer("INT1", 0, 10e3, 0.1, "x", 1.0, 0.5, "value", 0.01)
    trimming = Trimming((trimmer,), 5, 0, 1, 0.017, 0.008, fitted)
    made = replace(plan, sizing=replace(plan.sizing, trimming=trimming))
    assert said in " ".join(summary(made).split())
    assert not re.search(r"\d\n *%", summary(made))
    assert (words.SET_TRIMMERS in steps(made)) is fitted


def test_the_share_of_the_limit_is_that_of_the_worst_run(plan):
    """One run drives x to half of what another does: the table must not stop at the run of the netlist."""
    worst = tuple(replace(p, peak_volts=11.4, during="y") if p.node == "x" else p for p in plan.verdict.nodes)
    assert "x" in [peak.node for peak in worst]
    other = replace(plan, verdict=replace(plan.verdict, nodes=worst))
    (row,) = (row for row in node_table(other).rows if row[0] == "x")
    assert row[-1] == f"{100 * 11.4 / plan.circuit.nodes['x'].limit_volts:.0f} %"
    assert OTHER_RUNS in " ".join(summary(other).split())
    assert OTHER_RUNS not in " ".join(summary(plan).split())


def test_summary_keeps_to_the_width_and_to_plain_text(plan):
    name = "p_1_length_speed_t_th_d_squared_and_more"
    long = replace(
        plan.circuit.nodes["x"],
        node=name,
        offset_volts=-650.0,
        signal="alpha*x*y + beta*x*z - gamma*z*z*z*z + delta*x*x*y*y*z",
    )
    wide = replace(plan, circuit=replace(plan.circuit, nodes={**plan.circuit.nodes, "x": long}))
    for shown in (plan, wide, unbuildable(plan)):
        text = summary(shown, Path("outputs/plain"))
        assert max(map(len, text.splitlines())) <= WIDTH
        assert not any(line.lstrip().startswith("%") for line in text.splitlines())
        assert "\N{NO-BREAK SPACE}" not in text
        assert "\x1b" not in text
        assert "!" not in text


def test_control_characters_of_a_title_do_not_reach_the_terminal(plan):
    problem = replace(plan.problem, title="calm\x1b[2J\x07")
    assert summary(replace(plan, problem=problem)).splitlines()[0] == "calm?[2J?"


@pytest.mark.parametrize(
    ("cause", "remedy"),
    [("rounding", "finer resistor series"), ("slew", "higher slew rate"), ("bias current", "faster speed")],
)
def test_remedy_goes_by_the_largest_cause(plan, cause, remedy):
    budget = (Cause(cause, 7.0), Cause("finite gain", 1.0))
    verdict = replace(plan.verdict, verdict="inaccurate", max_error_percent=8.4, budget=budget)
    assert remedy in words.remedies(replace(plan, verdict=verdict))[0]


def test_colour_is_added_to_the_same_words(plan):
    import re

    assert re.sub(r"\x1b\[\d+m", "", summary(plan, colour=True)) == summary(plan)


def test_many_nodes_are_cut_to_the_fullest(plan):
    node = plan.circuit.nodes["x_d"]
    nodes = {f"n{i}": replace(node, node=f"n{i}", limit_volts=100.0) for i in range(40)} | {
        "x": plan.circuit.nodes["x"]
    }
    text = summary(replace(plan, circuit=replace(plan.circuit, nodes=nodes)))
    assert "and 25 more in nodes.csv" in text
    assert "\n  x " in text


def test_failure_says_what_then_why_then_what_mends_it(plan):
    verdict = replace(plan.verdict, verdict="inaccurate", max_error_percent=8.4)
    text = summary(replace(plan, verdict=verdict))
    order = [
        "Does not follow the equation closely enough: the error reaches 8.4 %",
        "gain-bandwidth of INT2",
        "To mend it",
    ]
    flat = " ".join(text.split())
    assert [flat.find(phrase) for phrase in order] == sorted(flat.find(phrase) for phrase in order)
    assert -1 not in [flat.find(phrase) for phrase in order]


@pytest.mark.parametrize(
    ("cause", "told"),
    [
        ("", "Node x_d reaches 14.3 V at 3.2 ms of circuit time; its limit is 12 V."),
        ("Its range was stated too small.", "Its range was stated too small."),
    ],
)
def test_overload_names_node_time_and_cause(plan, cause, told):
    peaks = (NodePeak("x_d", 14.26, 12.0, False, 3.2e-3, cause), NodePeak("x", 7.0, 12.0, True))
    flat = " ".join(summary(replace(plan, verdict=replace(plan.verdict, verdict="overload", nodes=peaks))).split())
    assert f"Does not work: x_d would leave the linear range. {told} To mend it: State a wider range" in flat


def test_what_cannot_be_built_says_so_first(plan):
    lines = summary(unbuildable(plan), Path("out")).splitlines()
    assert lines[1:4] == [
        "  Cannot be built with these parts.",
        "  No resistor of the series is large enough.",
        "  Written to out (start with plan.json)",
    ]


def test_chaos_has_its_horizon_in_the_headline(plan):
    told = words.headline(replace(plan, verdict=replace(plan.verdict, horizon=5.25)))
    assert "up to 5.25 s" in told


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.3123, "0.31 %"), (12.0, "12 %"), (0.05, "0.05 %"), (250.0, "250 %"), (0.0, "0 %"), (2e-5, "below 0.001 %")],
)
def test_percent(value, text):
    assert words.percent(value) == text


@pytest.mark.parametrize(
    ("scale", "text"), [(1.0, "in real time"), (0.25, "4 times faster"), (20.0, "20 times slower")]
)
def test_speed(plan, scale, text):
    assert text in words.speed(replace(plan, sizing=replace(plan.sizing, time_scale=scale)))[0]


def test_thinning_keeps_every_peak_and_both_ends():
    times = np.linspace(0, 1, 100_001)
    values = np.sin(40 * times)
    values[34_567], values[70_001], values[-2] = 3.0, -5.0, 2.5
    t, v = thinned(times, values)
    assert t.size <= 1.05 * MOST_POINTS
    assert v[-2] == 2.5
    assert (v.max(), v.min(), t[0], t[-1]) == (3.0, -5.0, 0.0, 1.0)
    assert np.all(np.diff(t) > 0)
    np.testing.assert_array_equal(v, values[np.searchsorted(times, t)])


def test_file_names_are_legal_and_differ_without_regard_to_case():
    taken: list[str] = []
    for name in ("x", "X", "x'", "cos(2*t)", "../../etc"):
        taken.append(unused_name("signal", name, "svg", taken))
    assert taken == ["signal_x.svg", "signal_X_2.svg", "signal_x_d.svg", "signal_cos_2_t.svg", "signal_etc.svg"]


def test_a_search_for_signs_that_stopped_says_how_far_it_may_be_off(plan):
    stopped = replace(plan, patch=replace(plan.patch, sign_stages=6, sign_stages_lower_bound=4, signs_open=True))
    text = " ".join(summary(stopped).split())
    assert "6 of the stages only turn signs, at least 4 are needed (a gap of 1.50); --think high searches on." in text
    high = replace(stopped, choices={**plan.choices, "think": "high"})
    assert "(a gap of 1.50)." in " ".join(summary(high).split())
    data = plan_data(stopped)
    assert (data["sign_stages"], data["sign_stages_lower_bound"], data["sign_stages_gap"]) == (6, 4, 2)
    assert data["sign_search_stopped"]
    assert "only turn signs" not in summary(plan)
