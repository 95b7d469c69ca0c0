"""A problem with other wishes: its text, read again, states them."""

from __future__ import annotations

from dataclasses import replace

import pytest

from patchplan.equation.build_text import build_lines, with_build
from patchplan.equation.reader import read_problem

HEAD = 'title = "decay"\nequations = ["x\' = -x"]\nduration = 5\n'
FILES = {
    "no table": HEAD + "[start]\nx = 1",
    "table": HEAD + '[build]  # wishes\nop_amp = "TL07x"  # the usual one\nspeed = 3\n[start]\nx = 1\n',
    "last line": HEAD + "[start]\nx = 1\n[build]",
    "dotted": HEAD + 'build.resistors = "E96"\nstart.x = 1\n',
    "inline": HEAD + 'build = { supply = [-15, 15], run = "free" }\nstart.x = 1\n',
}
CHANGES = {
    "parts": {"op_amp": "OPA2134", "resistors": "E12", "resistor_tolerance": 0.001, "capacitor_tolerance": 0.005},
    "supply": {"supply": (-12.0, 12.0), "reference": 5.0},
    "uneven": {"supply": (-5.0, 12.0), "reference": 2.5, "speed": "real time"},
    "speed and form": {"speed": 0.125, "offsets": False, "forms": (("x", "cascade"), ("y_2", "as written"))},
}


@pytest.mark.parametrize("file", FILES)
@pytest.mark.parametrize("change", CHANGES)
def test_the_text_states_the_wishes(file, change):
    problem = read_problem(FILES[file])
    wanted = replace(problem.build, **CHANGES[change])
    changed = with_build(problem, wanted)
    again = read_problem(changed.text)
    assert again.build == wanted == changed.build
    assert again.start == problem.start
    assert build_lines(again.build, wanted) == {}


def test_comments_stay_where_they_were():
    problem = read_problem(FILES["table"])
    text = with_build(problem, replace(problem.build, op_amp="OPA2277", resistors="E12")).text
    assert '[build]  # wishes\nresistors = "E12"\nop_amp = "OPA2277"  # the usual one\nspeed = 3\n' in text
    assert with_build(problem, problem.build).text == problem.text
