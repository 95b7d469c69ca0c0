"""`patchplan options`: exit codes, words, files."""

from __future__ import annotations

import csv
import io
import json
import re
from pathlib import Path
from xml.etree import ElementTree

import pytest
from typer.testing import CliRunner

from patchplan.cli import app
from patchplan.equation.reader import read_problem
from tests.test_cli import OSCILLATOR, loaded_by

FEW = ("--op-amp", "TL07x", "--op-amp", "OPA4140", "--op-amp", "MCP6004")


@pytest.fixture
def run(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "plain.toml").write_text(OSCILLATOR)
    return lambda *arguments: CliRunner().invoke(app, ["options", "plain.toml", *map(str, arguments)])


def listing(folder: Path) -> list[str]:
    return sorted(p.name for p in folder.iterdir())


def test_help_loads_nothing_heavy():
    heavy = {"numpy", "scipy", "sympy", "matplotlib", "rich", "jinja2", "filelock"}
    assert loaded_by(["options", "--help"]) & heavy == set()


def test_table_files_and_rows_that_cannot_be_built(run):
    done = run(*FEW, "--tolerance", "1%", "--tolerance", "0.1%,1%")
    assert done.exit_code == 0, done.output
    lines = done.stdout.splitlines()
    assert max(map(len, lines)) <= 80
    rows = [line for line in lines if re.match(r"  [* ][> ](TL07x|OPA4140) ", line)]
    assert len(rows) == 4
    assert "MCP6004 takes 1.8 V to 6 V" in " ".join(done.stdout.split())
    folder = Path("outputs/plain_options")
    assert listing(folder) == ["options.csv", "options.json", "options.svg"]
    data = json.loads((folder / "options.json").read_text(encoding="utf-8"))
    assert sorted(data["files"]) == listing(folder)
    assert len(data["options"]) == 6
    assert data["pick"] is None
    table = list(csv.DictReader(io.StringIO((folder / "options.csv").read_text(encoding="utf-8"))))
    assert [r["op_amp"] for r in table] == [o["op_amp"] for o in data["options"]]
    marked = [o for o in data["options"] if o["non_dominated"]]
    assert (
        len(marked) == sum(line.startswith("  * ") for line in lines) == sum(r["non_dominated"] == "yes" for r in table)
    )
    refused = [o for o in data["options"] if o["cannot_be_built"]]
    assert [o["error_percent"] for o in refused] == [None, None]
    ElementTree.parse(folder / "options.svg")


def test_the_pick_is_told_with_its_lines_and_written(run):
    done = run(*FEW, "--supply", "12", "--accept", "1%", "--plan-into", "picked")
    assert done.exit_code == 0, done.output
    assert done.stdout.startswith("Plain\n  Cheapest within an error of 1 %: ")
    told = done.stdout.split("Under [build], these lines give that plan:\n")[1]
    lines = [line.strip() for line in told.splitlines() if line.startswith("    ")]
    stated = read_problem(OSCILLATOR + "[build]\n" + "\n".join(lines) + "\n").build
    assert stated == read_problem(Path("picked/problem.toml")).build
    assert stated.supply == (-12.0, 12.0)
    data = json.loads(Path("outputs/plain_options/options.json").read_text(encoding="utf-8"))
    plan = json.loads(Path("picked/plan.json").read_text(encoding="utf-8"))
    check = data["pick"]["checked"][-1]
    assert check["option"] == data["pick"]["option"]
    assert check["max_error_percent"] == plan["check"]["max_error_percent"] <= 1.0
    assert "\n".join(f"{k} = {v}" for k, v in data["pick"]["build"].items()) == "\n".join(lines)


def test_a_wish_that_no_build_meets_names_the_limit_and_the_nearest(run):
    done = run(*FEW, "--accept", "0.0001%")
    assert done.exit_code == 1
    said = " ".join(done.stdout.split())
    found = re.search(
        r"No build meets an error of 0.0001 %. The nearest is (\w+), E24 1/2 %, ±15 V, with an error of (\S+) %. "
        r"Its largest part is ([a-z ]+), .*? It would do with --accept (\S+)%\.", said
    )  # fmt: skip
    assert found, said
    data = json.loads(Path("outputs/plain_options/options.json").read_text(encoding="utf-8"))
    built = [o for o in data["options"] if not o["cannot_be_built"]]
    least = min(built, key=lambda o: o["error_percent"])
    assert (found[1], found[3]) == (least["op_amp"], least["causes"][0]["cause"])
    assert float(found[4]) >= least["error_percent"] >= 0.9 * float(found[4])
    again = run(*FEW, "--accept", f"{found[4]}%")
    assert again.exit_code == 0, again.output


def test_a_spread_that_no_build_meets_names_what_spreads(run):
    done = run(*FEW, "--accept", "5%", "--spread", "0.1%")
    assert done.exit_code == 1
    said = " ".join(done.stdout.split())
    assert "No build meets an error of 5 % with a spread of 0.1 %." in said
    assert "Its largest part is capacitors" in said
    assert re.search(r"It would do with --spread [\d.]+%\.", said)


def test_no_build_at_all_is_a_failure_with_its_sentences(run):
    done = run("--op-amp", "MCP6004")
    assert done.exit_code == 1
    assert "None of the builds compared can be built." in done.stdout
    assert listing(Path("outputs/plain_options")) == ["options.csv", "options.json"]


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("--accept", "close"), '--accept is "close", which is no percentage. Write one such as 1%.'),
        (("--op-amp", "TL7x"), '"TL7x" is no op amp that is known. Did you mean TL07x?'),
        (("--spread", "1%"), "--spread needs a pick. Add --accept, such as --accept 1%."),
        (("--into", "."), "is not empty and holds no options (options.json of this program is missing in it)"),
    ],
)
def test_bad_input_is_refused_with_a_sentence_and_nothing_is_written(run, arguments, said):
    done = run(*arguments)
    assert done.exit_code == 2
    assert said in " ".join(done.stderr.split())
    assert max(map(len, done.stderr.splitlines())) <= 80
    assert listing(Path()) == ["plain.toml"]


def test_json_alone_and_quiet(run):
    done = run("--op-amp", "TL07x", "--json", "--no-pictures")
    assert json.loads(done.stdout)["options"][0]["op_amp"] == "TL07x"
    assert listing(Path("outputs/plain_options")) == ["options.csv", "options.json"]
    assert run("--op-amp", "TL07x", "--quiet").stdout == ""


def test_parts_of_a_stock_are_not_told_with_tolerances_they_do_not_have(run, tmp_path):
    lines = ["value,count,tolerance", *(f"{value},40,5%" for value in ("1k", "2.2k", "4.7k", "10k", "22k", "100k"))]
    (tmp_path / "drawer.csv").write_text("\n".join(lines))
    (tmp_path / "plain.toml").write_text(OSCILLATOR + '\n[build]\nresistors = "drawer.csv"\n')
    done = run("--op-amp", "TL07x", "--no-pictures")
    assert done.exit_code == 0, done.output
    assert " ".join(("drawer.csv", "stock/2")) in " ".join(done.stdout.split())
