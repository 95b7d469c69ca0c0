"""Every named check of a problem, with the place it points at."""

from fractions import Fraction

import pytest

from patchplan.equation.explicit import build_system
from patchplan.equation.problem import Input, Parameter, Problem, Recording, Terminal
from patchplan.equation.syntax import parse_equation
from patchplan.errors import ProblemFaults
from tests.equation.simulated import built, problem


def faults(equations, **tables):
    with pytest.raises(ProblemFaults) as caught:
        build_system(problem(equations, **tables))
    return caught.value.faults


@pytest.mark.parametrize(
    ("equations", "tables", "key", "words"),
    [
        (["x' = -xx"], {"start": "x = 0"}, "equations[0]", '"xx" is not defined'),
        (["x' = -x", "e = 1", "e = 2"], {"start": "x = 0"}, "equations[2]", "defined twice"),
        (["x' = -x"], {"start": "x = 0", "parameters": "k = 2"}, "parameters.k", "not used"),
        (["x' = -x"], {"start": "x = 0", "inputs": 'u = "t"'}, "inputs.u", "not used"),
        (["x' = -k'"], {"start": "x = 0", "parameters": "k = 2"}, "equations[0]", "no signal"),
        (["x'' = -x"], {"start": "x = 0"}, "start", "start value of x'"),
        (["x' = -x"], {"start": "x = 0\n\"x'\" = 1"}, "start.x'", "order 1"),
        (["x' = -e", "e = x"], {"start": "x = 0\ne = 1"}, "start.e", "definition"),
        (["x' = -x + e", "e = f + x", "f = 2*e"], {"start": "x = 0"}, "equations[1]", "Algebraic loop"),
        (["x' + y' = 1", "2*x' + 2*y' = x"], {"start": "x = 0\ny = 0"}, "equations[0]", "singular"),
        (["x' = -y'"], {"start": "x = 0\ny = 0"}, "equations", "1 differential equations stand for 2"),
        (["x' = y", "y' = x", "x = 2"], {"start": "x = 0\ny = 0"}, "equations", "3 differential equations"),
        (["x' = y", "y'' = x", "x = 2*y"], {"start": "x = 0\ny = 0"}, "equations", "3 differential equations"),
        (["x'*x' = 1"], {"start": "x = 0"}, "equations[0]", "product or a power"),
        (["x*x' = 1"], {"start": "x = 1"}, "equations[0]", "quotient of signals"),
        (["(1 + t)*x' = 1"], {"start": "x = 1"}, "equations[0]", "changes with the time"),
        (["x' = 1/t"], {"start": "x = 0"}, "equations[0]", "divides by zero at the start"),
        (["x' = x/(t - 3.0001)^2"], {"start": "x = 0"}, "equations[0]", "divides by zero at t = 3.0001"),
        (["x' = log(t - 1)"], {"start": "x = 0"}, "equations[0]", "no finite value at the start"),
        (["x' = u"], {"start": "x = 0", "inputs": 'u = "tan(t)"'}, "inputs.u", "no finite value at t = 1.57"),
        (["x' = pulse(t, 1, t)"], {"start": "x = 0"}, "equations[0]", "no constants"),
        (["x' = sawtooth(t, 0)"], {"start": "x = 0"}, "equations[0]", "no positive number"),
        (["x' = square(t, 1e-9)"], {"start": "x = 0"}, "equations[0]", "jumps in the run"),
        (["x' = -x"], {"start": "x = 0", "inputs": 'x = "t"'}, "inputs.x", '"x" is both an input and an unknown'),
        (["2*x' = -x"], {"start": "x = 0", "inputs": 'x = "t"'}, "inputs.x", '"x" is both an input and an unknown'),
        (["x' = -x"], {"start": "x = 0", "parameters": "x = 2"}, "parameters.x", "both a parameter and an unknown"),
        (["x' = y", "y = 2*x"], {"start": "x = 0", "inputs": "y = 1"}, "inputs.y", "both an input and a definition"),
        (["x' = (t + sin(t))/t"], {"start": "x = 0"}, "equations[0]", "divides by zero at the start"),
        (["x' = -x"], {"start": "x = 2", "ranges": "x = [-1, 1]"}, "ranges.x", "x starts at 2, outside"),
        (["x' = -x", "e = 2*x - 1"], {"start": "x = 2", "ranges": "e = [-1, 1]"}, "ranges.e", "e starts at 3"),
        (["x' = u*x"], {"start": "x = 2", "inputs": 'u = "t - 2"', "ranges": "u = [-1, 1]"}, "ranges.u", "at -2"),
        (["x' = u"], {"start": "x = 0", "inputs": 'u = "t"', "top": 'watch = ["u\'"]'}, "watch[0]", "derivative of"),
    ],
)  # fmt: skip
def test_a_fault_names_its_place(equations, tables, key, words):
    found = [f for f in faults(equations, **tables) if words in f.found]
    assert [f.key for f in found] == [key]


def test_a_name_with_two_meanings_is_one_fault():
    for tables in ({"inputs": 'x = "t"'}, {"parameters": "x = 2"}):
        assert len(faults(["x' = -x"], start="x = 0", **tables)) == 1
    assert len(faults(["x' = -x"], start="x = 0", inputs='x = "sin(k*t)"', parameters="k = 2")) == 1
    built(["x' = -x + u'"], start="x = 0", inputs='u = "sin(t)"')


def test_a_definition_at_fault_is_no_loop():
    assert len(faults(["x' = -x", "y = x^(1/2)", "z = 2*y"], start="x = 0")) == 1


def test_a_fault_at_the_start_speaks_of_the_start():
    (fault,) = faults(["x' = 1/t"], start="x = 0")
    assert fault.remedy == "Write it so that it has a finite value at t = 0."
    assert "end the run before" in faults(["x' = 1/(t - 3)"], start="x = 0")[0].remedy


def test_carets_stand_under_the_part_at_fault():
    spans = {
        "x' = (t + sin(t))/t": ("divides", "t"), "x' = x + log(t - 1)": ("finite", "log(t - 1)"),
        "x' = 1/(t - 3)^2": ("divides", "(t - 3)^2"),
    }  # fmt: skip
    for equation, (words, part) in spans.items():
        (fault,) = [f for f in faults([equation], start="x = 0") if words in f.found]
        assert equation[slice(*fault.span)] == part
        assert fault.span[1] == len(equation)
    (fault,) = faults(["x' = -x + y'", "y = 2*sqrt(t)"], start="x = 0")
    assert (fault.key, fault.span) == ("equations[1]", (6, 13))
    (fault,) = faults(["x' = -x + z", "z = 1/(s + 2)*e' + e'"], start="x = 0", inputs="e = { within = [0, 1] }")
    assert (fault.key, fault.span) == ("equations[1]", (14, 16))


def test_one_kind_of_fault_hides_no_other():
    found = faults(
        ["x'' = -sin(x)", "y' = yy + 1/y", "z' = e", "e = f + z", "f = e", "w*w' = u''"],
        start="x = 0\ny = 0\nw = 1", parameters="k = 2", inputs="u = { within = [0, 1] }",
        ranges="y = [1, 2]",
    )  # fmt: skip
    assert sorted((f.key, f.found.partition(" (")[0]) for f in found) == [
        ("equations[0]", "not built in this version: sin of a signal"),
        ("equations[1]", '"yy" is not defined.'),
        ("equations[3]", "Algebraic loop: e needs f needs e."),
        ("parameters.k", 'The parameter "k" is not used.'),
        ("ranges.y", "y starts at 0, outside this range."),
        ("start", "The start value of x' is missing."),
        ("start", "The start value of z is missing."),
    ]


def test_missing_start_values_do_not_hide_inputs_that_cannot_be_removed():
    found = faults(["x' = -x*u'"], inputs="u = { within = [0, 1] }")
    assert {f.key for f in found} == {"equations[0]", "start"}


def test_wishes_at_fault_do_not_hide_equations_at_fault():
    with pytest.raises(ProblemFaults) as caught:
        problem(["x' = -sin(x)"], start="x = 0", build='run = "twice"', ranges="x = [1]")
    assert [f.key for f in caught.value.faults] == ["equations[0]", "build.run", "ranges.x"]
    with pytest.raises(ProblemFaults) as caught:
        problem(["x'' = -sin(x)"], start="x = 'q'\nv = 0")
    assert [f.key for f in caught.value.faults] == ["equations[0]", "start", "start.x", ""]
    assert "sin of a signal" in caught.value.rendered


def test_near_misses_are_named():
    assert 'Did you mean "speed"' in faults(["speed' = -speeed"], start="speed = 0")[0].remedy


def test_all_faults_of_all_equations_come_at_once():
    found = faults(["x' = sin(x) + 1/x", "y' = sqrt(y)", "z' = -z"], start="x = 0\ny = 0\nz = 0")
    assert [(f.key, f.span) for f in found] == [
        ("equations[0]", (5, 11)),
        ("equations[0]", (14, 17)),
        ("equations[1]", (5, 12)),
    ]


def test_a_start_value_may_use_a_parameter_that_no_equation_uses():
    assert built(["x' = -x"], parameters="k = 2", start='x = "2*k"').states[0].start == 4


def test_a_recording_must_cover_the_run():
    given = Problem(
        "t", (parse_equation("x' = u", 0),), duration=10, start={"x": 0},
        inputs={"u": Input("u", recording=Recording("road.csv", (0.0, 9.0), (0.0, 1.0)))},
    )  # fmt: skip
    with pytest.raises(ProblemFaults, match=r"road\.csv runs from 0 to 9") as caught:
        build_system(given)
    assert caught.value.faults[0].key == "inputs.u"


@pytest.mark.parametrize("text", ["(x + y + z)^20*(x + y)^5", "(x + y + z + 1)^19 + 1"])
def test_an_expansion_that_is_too_large_is_refused_at_once(text):
    equations = (parse_equation(f"x' = {text}", 0), parse_equation("y' = 1", 1), parse_equation("z' = 1", 2))
    with pytest.raises(ProblemFaults, match="over 2000 terms"):
        build_system(Problem("t", equations, duration=1, start={"x": 0, "y": 0, "z": 0}))


def test_ranges_and_terminals_name_signals():
    equations = (parse_equation("x' = -k*x", 0),)
    given = Problem(
        "t", equations, duration=1, start={"x": 0}, parameters={"k": Parameter("k", Fraction(1))},
        ranges={"x'''": (-1, 1), "y": (0, 1)}, terminals={"k": Terminal(Fraction(1))},
    )  # fmt: skip
    with pytest.raises(ProblemFaults) as caught:
        build_system(given)
    assert [f.key for f in caught.value.faults] == ["terminals.k", "ranges.y"]
    given = Problem(
        "t", (parse_equation("x' = -x", 0),), duration=1, start={"x": 0}, ranges={"x'''": (-1, 1), "y": (0, 1)}
    )
    with pytest.raises(ProblemFaults) as caught:
        build_system(given)
    assert [f.key for f in caught.value.faults] == ["ranges.y"]
