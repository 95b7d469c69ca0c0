"""The command line: exit codes, what goes where, and what it must not load."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import jsonschema
import pytest
from typer.testing import CliRunner

from patchplan.cli import app

ROOT = Path(__file__).parents[1]
SCHEMA = json.loads((ROOT / "patchplan" / "report" / "plan.schema.json").read_text(encoding="utf-8"))
OSCILLATOR = 'title = "Plain"\nequations = ["x\'\' = -x"]\nduration = 6.0\n[start]\nx = 1.0\n"x\'" = 0.0\n'


@pytest.fixture
def run(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return lambda *arguments: CliRunner().invoke(app, [str(a) for a in arguments])


@pytest.fixture
def problem(tmp_path):
    path = tmp_path / "plain.toml"
    path.write_text(OSCILLATOR)
    return path


def loaded_by(arguments: list[str]) -> set[str]:
    code = (
        "import sys\nfrom patchplan.cli import main\n"
        f"sys.argv = ['patchplan', *{arguments!r}]\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "print('\\n' + ' '.join(sys.modules))"
    )
    environment = os.environ | {"PYTHONPATH": str(ROOT)}
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=environment, check=True)
    return {name.partition(".")[0] for name in done.stdout.splitlines()[-1].split()}


@pytest.mark.parametrize("arguments", [["--help"], ["plan", "--help"]])
def test_help_loads_nothing_heavy(arguments):
    heavy = {"numpy", "scipy", "sympy", "matplotlib", "rich", "jinja2", "filelock"}
    assert loaded_by(arguments) & heavy == set()


def test_a_faulty_file_is_told_of_before_anything_that_solves_is_loaded(tmp_path):
    (tmp_path / "bad.toml").write_text(OSCILLATOR.replace("-x", "-sin(x) + 1/(t - 9.0001)^2"))
    loaded = loaded_by(["plan", str(tmp_path / "bad.toml"), "--into", str(tmp_path / "made")])
    assert "numpy" in loaded
    assert loaded & {"scipy", "sympy", "matplotlib", "jinja2", "filelock"} == set()


def test_help_names_the_commands(run):
    done = run("--help")
    assert done.exit_code == 0
    assert all(command in done.stdout for command in ("plan", "start", "parts"))


def test_plan_of_an_oscillator_follows(run, problem):
    done = run("plan", problem)
    assert done.exit_code == 0, done.output
    assert done.stdout.startswith("Plain\n  Follows the equation within")
    assert max(map(len, done.stdout.splitlines())) <= 80
    folder = Path("outputs/plain")
    data = json.loads((folder / "plan.json").read_text())
    jsonschema.validate(data, SCHEMA)
    assert set(data["files"]) == {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}


def test_json_is_all_that_is_printed(run, problem, tmp_path):
    done = run("plan", problem, "--json", "--no-pictures", "--into", tmp_path / "made")
    assert done.exit_code == 0
    assert done.stdout == (tmp_path / "made" / "plan.json").read_text()
    assert done.stderr == ""
    assert not list((tmp_path / "made").glob("*.svg"))


def test_quiet_prints_nothing(run, problem):
    done = run("plan", problem, "--quiet", "--no-pictures")
    assert (done.exit_code, done.output) == (0, "")


def test_an_error_above_the_accepted_one_is_exit_code_1_and_still_a_plan(run, problem, tmp_path):
    done = run("plan", problem, "--accept", "0.0000001", "--no-pictures", "--into", tmp_path / "made")
    assert done.exit_code == 1
    assert "Does not follow the equation closely enough" in done.stdout
    assert json.loads((tmp_path / "made" / "plan.json").read_text())["check"]["verdict"] == "inaccurate"
    assert (tmp_path / "made" / "circuit.cir").is_file()


def test_parts_that_cannot_serve_are_exit_code_1_and_leave_the_verdict(run, problem, tmp_path):
    problem.write_text(OSCILLATOR + "[build]\nsupply = 200.0\n")
    done = run("plan", problem, "--into", tmp_path / "made")
    assert done.exit_code == 1, done.output
    assert "Cannot be built with these parts." in done.stdout
    data = json.loads((tmp_path / "made" / "plan.json").read_text())
    jsonschema.validate(data, SCHEMA)
    assert data["check"]["verdict"] == "not_buildable"
    assert [p.name for p in (tmp_path / "made").iterdir()] == ["plan.json"]


def test_bad_input_is_exit_code_2_with_all_faults_and_nothing_written(run, problem, tmp_path):
    problem.write_text(OSCILLATOR.replace("duration", "duratoin") + "[parameters]\nm = nan\n")
    done = run("plan", problem)
    assert (done.exit_code, done.stdout) == (2, "")
    assert "plain.toml:3:" in done.stderr
    assert "plain.toml:8:" in done.stderr
    assert "duration" in done.stderr
    assert "    m = nan\n        ^^^" in done.stderr
    assert "Traceback" not in done.stderr
    assert [p.name for p in tmp_path.iterdir()] == ["plain.toml"]


@pytest.mark.parametrize("name", ["missing.toml", "folder"])
def test_what_is_no_file_is_said_plainly(run, tmp_path, name):
    (tmp_path / "folder").mkdir()
    done = run("plan", name)
    assert (done.exit_code, done.stdout) == (2, "")
    assert name in done.stderr
    assert "Traceback" not in done.stderr


def test_a_folder_of_other_things_is_refused_before_any_work(run, problem, tmp_path):
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "thesis.txt").write_text("mine")
    done = run("plan", problem, "--into", tmp_path / "mine")
    assert done.exit_code == 2
    assert "holds no plan" in done.stderr
    assert [p.name for p in (tmp_path / "mine").iterdir()] == ["thesis.txt"]


def test_a_folder_that_cannot_be_made_is_said_plainly(run, problem, tmp_path):
    (tmp_path / "file").write_text("")
    done = run("plan", problem, "--no-pictures", "--into", tmp_path / "file" / "deep")
    assert done.exit_code == 2
    assert "file" in done.stderr
    assert "Traceback" not in done.output


def test_interrupt_is_said_plainly_and_leaves_the_plan(run, problem, tmp_path, monkeypatch):
    import patchplan.pipeline

    def interrupted(*arguments, **options):
        raise KeyboardInterrupt

    assert run("plan", problem, "--no-pictures").exit_code == 0
    before = (tmp_path / "outputs" / "plain" / "plan.json").read_bytes()
    monkeypatch.setattr(patchplan.pipeline, "plan", interrupted)
    done = run("plan", problem)
    assert done.exit_code == 130
    assert "Interrupted" in done.stderr
    assert (tmp_path / "outputs" / "plain" / "plan.json").read_bytes() == before


@pytest.mark.parametrize("option", [["--accept", "-1"], ["--think", "hard"], ["--colour"]])
def test_unknown_options_are_exit_code_2(run, problem, option):
    assert run("plan", problem, *option).exit_code == 2


def test_start_writes_a_problem_that_plans_well_and_overwrites_nothing(run, tmp_path):
    assert run("start", "mine.toml").exit_code == 0
    text = Path("mine.toml").read_text()
    assert text.count("#") > 10
    again = run("start", "mine.toml")
    assert again.exit_code == 2
    assert "left alone" in again.stderr
    assert Path("mine.toml").read_text() == text
    done = run("plan", "mine.toml", "--no-pictures")
    assert done.exit_code == 0, done.output
    assert "Follows the equation" in done.stdout


def test_parts_lists_the_catalogue_with_where_the_figures_are_from(run):
    done = run("parts")
    assert done.exit_code == 0
    assert all(name in done.stdout for name in ("TL07x", "AD633", "confirm"))
    assert max(map(len, done.stdout.splitlines())) <= 100
