"""Faulty recordings: what was found, and what mends it."""

from __future__ import annotations

import os

import pytest

from patchplan.equation.reader import read_problem
from tests.equation.test_reader_faults import GOOD, faults_of


@pytest.mark.parametrize(
    ("rows", "found"),
    [
        ("t,height\n0,0\n1,x\n", 'in line 3 "x" is no finite number'),
        ("t,height\n0,0\n1,nan\n", 'in line 3 "nan" is no finite number'),
        ("t,height\n0,0\n1\n", 'in line 3 "" is no finite number'),
        ("t,height\n0,0\n2,1\n1,1\n", "in line 4 the time 1 follows 2"),
        ("t,height\n0,0\n1,0\n1,1\n2,1\n", "in line 4 the time 1 stands a second time"),
        ("t;height\n0;0\n2;1\n", "its columns are parted by semicolons"),
        ("t\theight\n0\t0\n2\t1\n", "its columns are parted by tabs"),
        ("\n\n", "it is empty"),
        ("t,height\n0,0\n", "it has 1 row of numbers"),
        ("t,height\n", "it has 0 rows of numbers"),
        ("", "it is empty"),
        ("t,heigt\n0,0\n2,1\n", 'no column "height"'),
        ("t,height\n0.5,0\n2,1\n", "it runs from 0.5 to 2, the problem from 0 to 2"),
        ("t,height\n0,0\n1.5,1\n", "it runs from 0 to 1.5, the problem from 0 to 2"),
        ('t,height\n0,"0\n', "cannot be read"),
        (b"t,height\n0,\xff\n", "is not UTF-8"),
        (None, 'There is no file "road.csv"'),
    ],
)
def test_faulty_recordings(tmp_path, rows, found):
    if rows is not None:
        (tmp_path / "road.csv").write_bytes(rows if isinstance(rows, bytes) else rows.encode())
    path = tmp_path / "p.toml"
    table = '{ file = "road.csv", time = "t", value = "height" }'
    path.write_text(GOOD.replace('"sin(t)"', table), encoding="utf-8")
    error = faults_of(path)
    assert found in error.faults[0].found
    assert error.rendered.startswith(f"{path}:6:")


def test_a_step_in_a_recording_is_two_rows_a_millionth_apart(tmp_path):
    table = GOOD.replace('"sin(t)"', '{ file = "road.csv", time = "t", value = "height" }')
    (tmp_path / "p.toml").write_text(table, encoding="utf-8")
    (tmp_path / "road.csv").write_text("t,height\n0,0\n1.5,0\n1.5,1\n2,1\n")
    remedy = faults_of(tmp_path / "p.toml").faults[0].remedy
    assert remedy.endswith("two rows a millionth apart, here 1.5 and 1.5000015.")
    (tmp_path / "road.csv").write_text("t,height\n0,0\n1.5,0\n1.5000015,1\n2,1\n")
    assert read_problem(tmp_path / "p.toml").inputs["u"].recording.values == (0, 0, 1, 1)


@pytest.mark.parametrize("kind", ["folder", "pipe"])
def test_a_recording_is_a_regular_file(tmp_path, kind):
    (tmp_path / "r").mkdir() if kind == "folder" else os.mkfifo(tmp_path / "r")
    path = tmp_path / "p.toml"
    path.write_text(GOOD.replace('"sin(t)"', '{ file = "r", time = "t", value = "h" }'), encoding="utf-8")
    assert "is no regular file" in faults_of(path).faults[0].found
