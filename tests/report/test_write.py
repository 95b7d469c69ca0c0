"""Every file of the plan folder, looked at from outside."""

from __future__ import annotations

import csv
import io
import json
from dataclasses import replace
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

from patchplan.equation.problem import Input, Recording
from patchplan.report import write
from patchplan.report.write import plan_folder, problem_files, write_plan
from tests.report.test_plan_json import unbuildable

START = {"x": 20 / 3, "x_d": 2.5, "x_n": -20 / 3, "drive": 0.0, "int1_s": 0.0}


def board(plan):
    return START, f"* {plan.problem.title}\n.end\n"


@pytest.fixture(scope="module")
def files(plan):
    return plan_folder(plan, board=board)


def rows(content: bytes) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(content.decode())))


def test_folder_holds_every_file_that_its_plan_names(plan, tmp_path):
    names = write_plan(plan, tmp_path / "plan", board=board)
    written = {p.relative_to(tmp_path / "plan").as_posix() for p in (tmp_path / "plan").rglob("*") if p.is_file()}
    assert set(names) == written
    assert set(json.loads((tmp_path / "plan" / "plan.json").read_text())["files"]) == written
    assert written >= {
        "plan.json", "report.html", "parts.csv", "nodes.csv", "circuit.cir", "waveforms.csv", "source_drive.csv",
        "signal_x.svg", "signal_x_d.svg", "nodes.svg", "budget.svg", "problem.toml", "data/drive.csv",
    }  # fmt: skip


def test_same_plan_gives_same_bytes(plan, files):
    assert plan_folder(plan, board=board) == files


def test_without_pictures_nothing_is_drawn(plan):
    assert not [name for name in plan_folder(plan, pictures=False, board=board) if name.endswith(".svg")]


def test_plan_that_cannot_be_built_leaves_the_verdict_alone(plan, tmp_path):
    assert write_plan(unbuildable(plan), tmp_path / "plan") == ("plan.json",)
    assert json.loads((tmp_path / "plan" / "plan.json").read_text())["check"]["verdict"] == "not_buildable"


def test_problem_and_recording_are_copied_as_they_are(plan, files):
    assert files["problem.toml"].decode() == plan.problem.text
    assert files["data/drive.csv"] == (plan.problem.folder / "data" / "drive.csv").read_bytes()


def test_recording_of_a_taken_name_or_outside_is_copied_under_another(plan, tmp_path):
    (tmp_path / "inside").mkdir()
    for path in (tmp_path / "outside.csv", tmp_path / "inside" / "Nodes.csv"):
        path.write_text(path.name)
    recordings = {
        n: Input(n, recording=Recording(f, (0.0,), (0.0,))) for n, f in (("a", "../outside.csv"), ("b", "Nodes.csv"))
    }
    problem = replace(plan.problem, inputs=recordings, folder=tmp_path / "inside")
    made = problem_files(replace(plan, problem=problem, patch=replace(plan.patch, sources={})), ["nodes.csv"])
    assert {n: c.decode() for n, c in made.items() if n != "problem.toml"} == {
        "recording_outside.csv": "outside.csv", "recording_Nodes.csv": "Nodes.csv",
    }  # fmt: skip


def test_source_file_is_the_input_in_volts_over_circuit_time(plan, files):
    table = rows(files["source_drive.csv"])
    times = np.array([float(r["circuit_time_s"]) for r in table]) / plan.sizing.time_scale
    volts = np.array([float(r["volts"]) for r in table])
    recording = plan.patch.sources["drive"].waveform.recording
    np.testing.assert_allclose(volts, 20 * np.interp(times, recording.times, recording.values), atol=1e-7)


def test_waveforms_hold_volts_and_units(plan, files):
    table = rows(files["waveforms.csv"])
    assert len(table) == plan.verdict.times.size
    row = table[137]
    assert float(row["problem_time_s"]) == pytest.approx(float(row["circuit_time_s"]) * 100)
    assert float(row["v(x)"]) == pytest.approx(20 * float(row["x circuit"]), rel=1e-6)
    assert float(row["x equation"]) == pytest.approx(0.45 * np.cos(2 * 1.37 + 0.7), rel=1e-3)


def test_waveforms_of_a_large_board_are_thinned_but_keep_jumps(plan, monkeypatch):
    count = plan.verdict.times.size
    times = plan.verdict.times.copy()
    times[500] = times[501]
    jumping = replace(plan, verdict=replace(plan.verdict, times=times))
    monkeypatch.setattr(write, "MOST_NUMBERS", count * 2)
    found = [float(r["circuit_time_s"]) for r in rows(write.waveforms_csv(jumping).encode())]
    assert found[0] == times[0]
    assert found[-1] == pytest.approx(times[-1], rel=1e-8)
    assert found.count(pytest.approx(times[501], rel=1e-8)) == 2
    assert len(found) < count / 2


def test_parts_list_has_one_row_a_part_in_si_units(plan, files):
    table = {r["ref"]: r for r in rows(files["parts.csv"])}
    assert set(table) == {p.ref for p in plan.circuit.parts}
    assert (table["R1"]["value"], table["R1"]["unit"], table["R1"]["tolerance_percent"]) == ("47000", "ohm", "1")
    assert float(table["C1"]["value"]) == 1e-7
    assert float(table["P1"]["value"]) == 1e4


def test_node_list_has_the_peaks_of_the_check(plan, files):
    table = {r["node"]: r for r in rows(files["nodes.csv"])}
    assert float(table["x"]["checked_peak_volts"]) == pytest.approx(np.abs(plan.verdict.volts["x"]).max(), rel=1e-8)
    assert table["x_d"]["sign"] == "-1"


def test_pictures_are_xml_with_a_unit_on_every_axis(files):
    words = {n: " ".join(ElementTree.fromstring(c).itertext()) for n, c in files.items() if n.endswith(".svg")}
    for name in ("signal_x.svg", "signal_x_d.svg"):
        assert words[name].count("[problem units]") == 2
        assert "[V]" in words[name]
        assert "problem time [s]" in words[name]
        assert "[% of peak]" in words[name]
        assert "limit +12 V" in words[name]
    assert "node voltage [V]" in words["nodes.svg"]
    assert "error [% of peak]" in words["budget.svg"]


def test_names_from_the_file_cannot_become_markup(plan):
    problem = replace(plan.problem, title="<script>alert(1)</script>", text="<b>&")
    cause = replace(plan.verdict.budget[0], cause="<img src=x onerror=y>")
    verdict = replace(plan.verdict, budget=(cause,), warnings=("<i>w</i>",))
    page = plan_folder(replace(plan, problem=problem, verdict=verdict), board=board)["report.html"].decode()
    for bad in ("<script>", "<b>&", "<img", "<i>w"):
        assert bad not in page


def test_page_needs_nothing_from_elsewhere(files):
    page = files["report.html"].decode()
    for fetched in ("<link", "<script", "<iframe", "<img", "@import", 'href="http', 'href="//', "src="):
        assert fetched not in page


def test_page_has_unique_identifiers_and_no_dead_references(files):
    import re

    page = files["report.html"].decode()
    ids = re.findall(r'\bid="([^"]+)"', page)
    assert len(ids) == len(set(ids))
    used = set(re.findall(r'href="#([^"]+)"', page)) | set(re.findall(r"url\(#([^)]+)\)", page))
    assert used <= set(ids)


def test_page_says_what_to_measure(files):
    page = files["report.html"].decode()
    assert "+6.667 V" in page
    assert "apply -15 V and 15 V" in page
    assert "Local codes and licensed practice come first" in page


def test_writing_does_not_follow_a_relative_folder_upwards(plan, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    write_plan(plan, Path("outputs") / "plan", board=board)
    assert (tmp_path / "outputs" / "plan" / "plan.json").is_file()
