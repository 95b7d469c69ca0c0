"""The problem file as a whole: what a good one gives."""

from __future__ import annotations

from fractions import Fraction

import pytest

from patchplan.equation.problem import Build, Input, Parameter, Recording, Terminal, Watch
from patchplan.equation.reader import read_problem
from patchplan.equation.tree import text_of
from patchplan.errors import ProblemFaults

SEAT = """title = "Seat suspension rig"
equations = [
  "m*z'' = -k*(z - y) - c*(z' - y') + F",  # prime marks: d/dt
  "travel = z - y",
]
duration = 6.0
time_unit = "s"
watch = ["z", "-travel", "+z'"]

[parameters]
m = 80.0
k = { value = 12e3, unit = "N/m", tolerance = "2%" }
c = { from = 200, to = 1200, value = 700 }

[start]
z = 0.0
"z'" = "c/700 - 1/3"

[inputs]
F = "-785 * step(t - 0.5)"
y = { file = "road.csv", time = "t", value = "height" }
g = { within = [-1.0, "m/40"] }

[ranges]
travel = [-0.08, 0.08]

[terminals]
y = { volts_per_unit = 50.0 }
travel = { volts_per_unit = 25.0, offset = 2.5 }

[build]
supply = [0, 5]
reference = { volts = 5.0, tolerance = "0.1%" }
run = "free"
resistors = "E96"
capacitors = "E12"
resistor_limits = ["2k", 1e6]
capacitor_limits = ["1n", "1u"]
resistor_tolerance = "1%"
capacitor_tolerance = 0.05
op_amp = "mine"
multiplier = "AD633"
pairs = false

[part.mine]
kind = "op_amp"
gain_bandwidth = 1.5e6
"""
PARTS = {"op_amp": ["TL07x"], "multiplier": ["AD633"]}


@pytest.fixture
def seat(tmp_path):
    (tmp_path / "road.csv").write_text("t,height,other\n0,0,x\n3.5,1e-1,x\n\n6,0,x\n", encoding="utf-8")
    path = tmp_path / "seat.toml"
    path.write_text(SEAT, encoding="utf-8")
    return path


def test_whole_file(seat):
    problem = read_problem(seat, part_names=PARTS)
    assert problem.title == "Seat suspension rig"
    assert [text_of(e.left) for e in problem.equations] == ["m*z''", "travel"]
    assert problem.duration == 6
    assert problem.watch == (Watch("z"), Watch("travel", 0, -1), Watch("z", 1, 1))
    assert problem.parameters == {
        "m": Parameter("m", Fraction(80)),
        "k": Parameter("k", Fraction(12000), tolerance=0.02, unit="N/m"),
        "c": Parameter("c", Fraction(700), Fraction(200), Fraction(1200)),
    }
    assert problem.start == {"z": 0, "z'": Fraction(2, 3)}
    assert problem.inputs["y"] == Input("y", recording=Recording("road.csv", (0.0, 3.5, 6.0), (0.0, 0.1, 0.0)))
    assert problem.inputs["g"] == Input("g", within=(Fraction(-1), Fraction(2)))
    assert text_of(problem.inputs["F"].tree) == "(-785)*step(t - 0.5)"
    assert problem.ranges == {"travel": (Fraction(-2, 25), Fraction(2, 25))}
    assert problem.terminals == {"y": Terminal(Fraction(50)), "travel": Terminal(Fraction(25), Fraction(5, 2))}
    assert problem.folder == seat.parent
    assert problem.text == SEAT


def test_build_wishes(seat):
    assert read_problem(str(seat), part_names=PARTS).build == Build(
        supply=(0.0, 5.0), reference=5.0, reference_tolerance=0.001, run="free", resistors="E96", capacitors="E12",
        resistor_limits=(2e3, 1e6), capacitor_limits=(1e-9, 1e-6), resistor_tolerance=0.01, capacitor_tolerance=0.05,
        op_amp="mine", multiplier="AD633", speed="real time",
    )  # fmt: skip


def test_own_parts_hold_plain_numbers(seat):
    part = read_problem(seat).own_parts["mine"]
    assert part == {"kind": "op_amp", "gain_bandwidth": 1.5e6}
    assert type(part["gain_bandwidth"]) is float


def test_spans_point_at_values(seat):
    problem = read_problem(seat)
    start, end = problem.spans["parameters.k.value"]
    assert problem.text[start:end] == "12e3"
    start, end = problem.spans["start.z'"]
    assert problem.text[start:end] == '"c/700 - 1/3"'
    start, end = problem.spans["equations[1]"]
    assert problem.text[start:end] == '"travel = z - y"'


LEAST = """equations = ["x' = -a*x"]
duration = 1
[parameters]
a = %s
"""


def test_least_file_takes_all_defaults():
    problem = read_problem(LEAST % "1.1")
    assert problem.parameters["a"].value == Fraction(11, 10)
    assert (problem.title, problem.time_unit, problem.watch, problem.start) == ("problem", "s", (), {})
    assert problem.build == Build()


@pytest.mark.parametrize(
    ("written", "value", "unit"),
    [
        ("8_0", 80, ""),
        ('"8/3"', Fraction(8, 3), ""),
        ('"80 kg"', 80, "kg"),
        ('"4.7k"', 4700, ""),
        ('"4.7k ohm"', 4700, "ohm"),
        ('{ value = "2*pi/pi", unit = "1/s" }', 2, "1/s"),
        ('{ value = "5 N/m" }', 5, "N/m"),
        ('"b^2"\nb = "c + 1"\nc = 2', 9, ""),
        ("1e-7", Fraction(1, 10**7), ""),
    ],
)
def test_parameter_values(written, value, unit):
    parameter = read_problem(LEAST % written).parameters["a"]
    assert (parameter.value, parameter.unit) == (value, unit)


@pytest.mark.parametrize(
    ("written", "build"),
    [
        ("supply = 12", Build(supply=(-12.0, 12.0), reference=5.0)),
        ('supply = "12 V"', Build(supply=(-12.0, 12.0), reference=5.0)),
        ("reference = 2.5", Build(reference=2.5)),
        ("reference = { volts = 2.5 }", Build(reference=2.5)),
        ("speed = 250", Build(speed=250.0)),
        ('speed = "1k"', Build(speed=1000.0)),
        ('speed = "real time"', Build(speed="real time")),
        ('resistor_limits = ["1k ohm", "2M"]', Build(resistor_limits=(1e3, 2e6))),
    ],
)
def test_build_values(written, build):
    assert read_problem(LEAST % "1" + f"[build]\n{written}\n").build == build


def test_speed_stays_free_where_the_file_says_so():
    text = LEAST % "1" + "[terminals]\nx = { volts_per_unit = 1 }\n[build]\n"
    assert read_problem(text).build.speed == "real time"
    assert read_problem(text + 'speed = "free"\n').build.speed == "free"


def test_text_with_carriage_returns_and_byte_order_mark(tmp_path):
    path = tmp_path / "p.toml"
    path.write_bytes(b"\xef\xbb\xbf" + (LEAST % "2").replace("\n", "\r\n").encode())
    problem = read_problem(path)
    assert problem.parameters["a"].value == 2
    start, end = problem.spans["parameters.a"]
    assert problem.text[start:end] == "2"


def test_names_of_one_letter_case_are_two_names():
    text = """equations = ["x' = -K*x + k*s", "s' = lambda*I"]\nduration = 1\n
[parameters]\nk = 1\nK = 2\nlambda = 3\nI = 4\n"""
    assert [p.value for p in read_problem(text).parameters.values()] == [1, 2, 3, 4]


@pytest.mark.parametrize("allowed", [False, True])
def test_recording_outside_the_folder_needs_leave(tmp_path, allowed):
    (tmp_path / "road.csv").write_text("t,h\n0,0\n1,1\n", encoding="utf-8")
    inside = tmp_path / "inside"
    inside.mkdir()
    (inside / "link.csv").symlink_to(tmp_path / "road.csv")
    for name in ("../road.csv", "link.csv", str(tmp_path / "road.csv")):
        path = inside / "p.toml"
        path.write_text(
            f"""equations = ["x' = u"]\nduration = 1\n[inputs]\nu = {{ file = "{name}", time = "t", value = "h" }}\n""",
            encoding="utf-8",
        )
        if allowed:
            assert read_problem(path, trust_paths=True).inputs["u"].recording.values == (0.0, 1.0)
        else:
            with pytest.raises(ProblemFaults, match="outside the problem file's folder"):
                read_problem(path)


def test_a_unit_of_the_files_own_time_needs_no_conversion():
    text = 'time_unit = "ms"\n' + LEAST % "1" + 'k = "250 ms"\nc = { value = 1, unit = "V/ms" }\n'
    assert read_problem(text).parameters["k"] == Parameter("k", Fraction(250), unit="ms")


def test_a_letter_of_an_input_or_a_signal_is_a_suffix_where_only_a_number_can_stand():
    text = (
        'equations = ["k\' = -a*k + b*u"]\nduration = "1k"\n[inputs]\nu = 1\n[start]\nk = "2k"\n[parameters]\n'
        'a = "4.7u"\nb = { value = "4.7u", from = "1u", to = "10k", tolerance = "1%" }\n'
    )
    problem = read_problem(text)
    assert (problem.duration, problem.start["k"]) == (1000, 2000)
    assert problem.parameters["a"].value == Fraction(47, 10**7)
    assert (problem.parameters["b"].low, problem.parameters["b"].high) == (Fraction(1, 10**6), 10_000)


def test_a_unit_spelled_like_a_signal_is_a_unit():
    text = 'equations = ["V\' = -a*V"]\nduration = 1\n[start]\nV = "5 V"\n[parameters]\na = 1\n'
    assert read_problem(text).start == {"V": 5}


@pytest.mark.parametrize(
    ("supply", "volts"),
    [("15", 10), ("14", 5), ("12", 5), ("5", 2.5), ("[-5, 12]", 2.5), ("3", 1.25), ("18", 10), ("[0, 5]", 10)],
)
def test_the_reference_goes_with_the_supply(supply, volts):
    text = LEAST % "1" + f"[build]\nsupply = {supply}\n"
    assert read_problem(text).build.reference == volts
    assert read_problem(text + "reference = 7.5\n").build.reference == 7.5
