"""The patch computes exactly the equations of its Form, and every inverting stage inverts."""

from __future__ import annotations

from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from patchplan.equation.explicit import system_of
from patchplan.equation.reader import read_problem
from patchplan.equation.system import System
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.read_back import read_back
from tests.systems import companion, knob, lorenz, system, term, van_der_pol


def assert_same_equations(made: System) -> None:
    patch = build_patch(Form(made))
    rows = read_back(patch, {r.name for r in made.signals})
    for row in (*made.rows, *made.signals):
        assert rows[row.name] == row


@pytest.mark.parametrize("made", [van_der_pol(), lorenz(), companion(1), companion(7)])
def test_known_systems_read_back(made):
    assert_same_equations(made)


NAMES = ["x", "X", "x'", "w"]
COEFFICIENTS = st.fractions(min_value=-50, max_value=50, max_denominator=40).filter(bool)
TERMS = st.builds(
    lambda c, f, k: term(c, *f, knobs=k),
    COEFFICIENTS,
    st.lists(st.sampled_from(NAMES), max_size=4),
    st.lists(st.sampled_from(["a", "b"]), max_size=2),
)


@st.composite
def random_systems(draw):
    states = draw(st.lists(st.sampled_from(["x", "X", "x'"]), min_size=1, unique=True))
    usable = set(states) | {"w"}
    rows = {}
    for name in [*states, "w"]:
        allowed = usable - {"w"} if name == "w" else usable
        terms = draw(st.lists(TERMS, min_size=1, max_size=5))
        rows[name] = [t for t in terms if {n for n, _ in t.factors} <= allowed] or [term(1, states[0])]
    starts = {s: draw(st.integers(-3, 3)) for s in states}
    knobs = [knob("a", 1, 2, 3), knob("b", -1, Fraction(1, 2), 4)]
    signals = {"w": rows.pop("w")}
    return system(starts, rows, signals=signals, knobs=knobs, watch=[*states, "w"])


@settings(max_examples=40, deadline=None)
@given(random_systems())
def test_random_systems_read_back(made):
    if all(row.terms for row in (*made.rows, *made.signals)):
        assert_same_equations(made)


def test_nodes_are_unique_whatever_the_case():
    made = system({"x": 0, "X": 0}, {"x": [term(-1, "X")], "X": [term(1, "x")]})
    nodes = [s.node for s in build_patch(Form(made)).stages]
    assert len({n.lower() for n in nodes}) == len(nodes)


def test_one_knob_serves_both_sides_of_a_damper():
    force = [term(1, "v", knobs=["c"]), term(-1, "w", knobs=["c"])]
    made = system(
        {"v": 1, "w": 0},
        {
            "v": [term(-t.coefficient, *[n for n, _ in t.factors], knobs=t.knobs) for t in force],
            "w": [term(3 * t.coefficient, *[n for n, _ in t.factors], knobs=t.knobs) for t in force],
        },
        knobs=[knob("c", 1, 2, 3)],
    )
    patch = build_patch(Form(made))
    assert sum(s.knob == "c" for s in patch.stages) == 1
    assert_same_equations(made)


def test_knob_through_zero_gets_both_polarities():
    made = system({"x": 1}, {"x": [term(1, "x", knobs=["g"])]}, knobs=[knob("g", -1, 0, 1)])
    patch = build_patch(Form(made))
    stage = next(s for s in patch.stages if s.knob)
    by_node = patch.by_node()
    ends = [by_node[w.source] for w in stage.wires]
    assert stage.bipolar
    assert ends[0].signal == ends[1].signal
    assert ends[0].sign == -ends[1].sign


def test_equal_products_are_built_once():
    made = system(
        {"x": 1, "y": 1},
        {"x": [term(-1, "x", "y")], "y": [term(2, "x", "y"), term(-1, "x", "x", "y")]},
    )
    assert build_patch(Form(made)).counts()["multiplier"] == 2


def test_a_wrong_sign_is_caught_when_read_back():
    from dataclasses import replace

    patch = build_patch(Form(van_der_pol()))
    flipped = tuple(replace(s, sign=-s.sign) if s.name == "I1" else s for s in patch.stages)
    with pytest.raises(ValueError, match="does not invert"):
        read_back(replace(patch, stages=flipped), ())


def test_a_switched_step_takes_the_polarity_of_the_reference_that_is_there():
    """A step that the board switches from +10 V needs no inverter while every sign can be served without."""
    from patchplan.equation.syntax import parse_expression
    from patchplan.equation.system import Source
    from patchplan.equation.waveform import Waveform

    step = Source("u", Waveform(parse_expression("5*step(t - 1)")), external=False)
    made = system({"x": 0}, {"x": [term(1, "u"), term(-1, "x")]}, sources=[step])
    patch = build_patch(Form(made))
    assert patch.counts().get("inverter", 0) == 0
    assert next(s.sign for s in patch.stages if s.kind == "source") == 1
    assert any(s.kind == "reference" for s in patch.stages)


def test_a_definition_used_once_and_not_watched_is_wired_straight_in():
    """force = z - y stands in one equation: the integrator is the summer."""
    text = 'title = "t"\nequations = ["x\' = -x + 2*force", "force = z - y", "y\' = -y", "z\' = -z"]\nduration = 1\n'
    start = "[start]\nx = 1\ny = 1\nz = 1\n"
    patch = build_patch(Form(system_of(read_problem(text + 'watch = ["x"]\n' + start))))
    kept = build_patch(Form(system_of(read_problem(text + 'watch = ["x", "force"]\n' + start))))
    assert "summer" not in patch.counts()
    assert kept.counts()["summer"] == 1


def test_a_summer_in_front_takes_the_inputs_named():
    made = system({"x": 1, "y": 1}, {"x": [term(-1, "x"), term(5, "x", "y"), term(3, "y")], "y": [term(-1, "y")]})
    patch = build_patch(Form(made), summers=("x<-x*y", "x<-y"))
    by_node = patch.by_node()
    stage = next(s for s in patch.stages if s.signal == "front of x")
    assert {by_node[w.source].signal for w in stage.wires} == {"x*y", "y"}
    rows = read_back(patch, ())
    assert [rows[r.name] for r in made.rows] == list(made.rows)
