"""Input derivatives removed by a change of states, against formulations that know the derivative."""

from fractions import Fraction

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from patchplan.equation.explicit import build_system
from patchplan.equation.problem import Input, Problem, Recording
from patchplan.equation.syntax import parse_equation
from patchplan.errors import ProblemFaults
from tests.equation.simulated import built, simulate

T = np.linspace(0.0, 6.0, 301)
SEAT = "m = 80.0\nk = 12e3\nc = { from = 200, to = 1200, value = 700 }"


def seat(**tables):
    return built(["m*z'' = -k*(z - y) - c*(z' - y') + F", "travel = z - y"], duration="6", parameters=SEAT,
                 top="watch = [\"z\", \"travel\", \"z'\"]", **tables)  # fmt: skip


def test_the_damper_stays_one_coefficient():
    system = seat(start='z = 0\n"z\'" = 0', inputs='F = "-785*step(t - 0.5)"\ny = { within = [-1, 1] }')
    text = {row.name: str(row) for row in (*system.rows, *system.signals)}
    assert text["z_q"] == "z_q: 1*F + 12000*y + -12000*z"
    assert text["z'"] == "z': 1/80*[c]*y + -1/80*[c]*z + 1/80*z_q"
    assert text["z"] == "z: 1*z'"
    assert text["travel"] == "travel: -1*y + 1*z"


def test_the_new_state_starts_the_same_at_every_setting_of_a_knob():
    system = built(["m*x'' = -c*x' - x + c*u'"], start="x = 1\n\"x'\" = 2", inputs='u = "3*cos(t)"',
                   parameters="m = { from = 1, to = 3, value = 2 }\nc = { from = 1, to = 2, value = 1.5 }")  # fmt: skip
    assert [(s.name, s.start) for s in system.states] == [("x", 1), ("x_q", 0)]
    for knobs in ({"1/m": 1.0, "c": 1.0}, {"1/m": 1 / 3, "c": 2.0}):
        m, c = 1 / knobs["1/m"], knobs["c"]
        expected = solve_ivp(
            lambda t, s, m=m, c=c: [s[1], (-c * s[1] - s[0] - 3 * c * np.sin(t)) / m], (0, 6), [1, 2], t_eval=T,
            rtol=1e-11, atol=1e-13,
        ).y  # fmt: skip
        assert np.allclose(simulate(system, T, knobs)["x"], expected[0], atol=1e-7)


@pytest.mark.parametrize("c", [200.0, 700.0, 1200.0])
def test_the_seat_moves_as_it_does_with_the_derivative_written_out(c):
    system = seat(start='z = 0.01\n"z\'" = 0', inputs='F = "-785*step(t - 0.5)"\ny = "0.05*(1 - cos(3*t))"')
    found = simulate(system, T, {"c": c})

    def rate(t, x, force):
        y, dy = 0.05 * (1 - np.cos(3 * t)), 0.15 * np.sin(3 * t)
        return [x[1], (-12e3 * (x[0] - y) - c * (x[1] - dy) + force) / 80]

    first = solve_ivp(rate, (0, 0.5), [0.01, 0.0], t_eval=T[T <= 0.5], args=(0.0,), rtol=1e-11, atol=1e-13)
    then = solve_ivp(rate, (0.5, 6), first.y[:, -1], t_eval=T[T > 0.5], args=(-785.0,), rtol=1e-11, atol=1e-13)
    expected = np.hstack([first.y, then.y])
    assert np.allclose(found["z"], expected[0], atol=1e-8)
    assert np.allclose(found["z'"], expected[1], atol=1e-7)


def test_the_physical_state_starts_where_the_problem_says():
    system = built(["x' = -2*x + 3*u'"], duration="6", start="x = 5", inputs='u = "cos(t)"')
    assert [(s.name, s.start) for s in system.states] == [("x_q", 2)]
    t = T
    # x' = -2x - 3 sin t, x(0) = 5: particular solution (3 cos t - 6 sin t)/5.
    closed = (3 * np.cos(t) - 6 * np.sin(t)) / 5 + (5 - 0.6) * np.exp(-2 * t)
    assert np.allclose(simulate(system, t)["x"], closed, atol=1e-8)


def test_a_step_at_the_start_has_happened_already():
    system = built(["x' = -2*x + 3*u'"], duration="6", start="x = 5", inputs='u = "4*step(t)"')
    assert np.allclose(simulate(system, T)["x"], 5 * np.exp(-2 * T), atol=1e-8)


def test_a_later_step_jumps_the_output():
    system = built(["x' = -2*x + 3*u'"], duration="6", start="x = 0", inputs='u = "4*step(t - 1)"')
    expected = np.where(T >= 1.0, 12 * np.exp(-2 * (T - 1)), 0.0)
    assert np.allclose(simulate(system, T)["x"], expected, atol=1e-8)


def test_second_derivatives_of_coupled_equations():
    system = built(
        ["2*x'' + y'' = -3*x' - x + 3*u'' + u'", "x'' - y'' = y + u - 2*v'"], duration="6",
        start="x = 0\n\"x'\" = 1\ny = 2\n\"y'\" = 0", inputs='u = "sin(2*t)"\nv = "exp(-t)"',
        top='watch = ["x", "y"]',
    )  # fmt: skip
    assert len(system.states) == 4

    def rate(t, s):
        u, du, ddu, dv = np.sin(2 * t), 2 * np.cos(2 * t), -4 * np.sin(2 * t), -np.exp(-t)
        a = np.linalg.solve([[2, 1], [1, -1]], [-3 * s[1] - s[0] + 3 * ddu + du, s[2] + u - 2 * dv])
        return [s[1], a[0], s[3], a[1]]

    expected = solve_ivp(rate, (0, 6), [0, 1, 2, 0], t_eval=T, rtol=1e-11, atol=1e-13).y
    found = simulate(system, T)
    assert np.allclose(found["x"], expected[0], atol=1e-6)
    assert np.allclose(found["y"], expected[2], atol=1e-6)


def test_a_nonlinear_plant_keeps_the_replaced_rate_as_a_signal():
    system = built(["x'' = -x'^3 - x + 3*u'"], duration="6", start='x = 1\n"x\'" = 0', inputs='u = "sin(t)"')
    assert [r.name for r in system.signals] == ["x'"]
    expected = solve_ivp(
        lambda t, s: [s[1], -(s[1] ** 3) - s[0] + 3 * np.cos(t)], (0, 6), [1, 0], t_eval=T, rtol=1e-11, atol=1e-13
    ).y
    found = simulate(system, T)
    assert np.allclose(found["x"], expected[0], atol=1e-7)
    assert np.allclose(found["x'"], expected[1], atol=1e-7)


@pytest.mark.parametrize(
    ("equations", "words"),
    [
        (["x' = -x*u'"], "coefficient that changes"),
        (["x' = -x + t*u'"], "coefficient that changes"),
        (["x' = -x + u''"], "more often than"),
        (["x' = -x", "y' = -y^2 + u''"], "more often than"),
    ],
)
def test_what_no_change_of_states_removes_is_refused_with_what_to_supply(equations, words):
    start = "\n".join(f"{e[0]} = 0" for e in equations)
    with pytest.raises(ProblemFaults, match=words) as caught:
        built(equations, start=start, inputs="u = { within = [-1, 1] }")
    assert "Supply u'" in caught.value.faults[0].remedy


def test_a_watched_signal_that_needs_the_derivative_is_refused():
    with pytest.raises(ProblemFaults, match="derivative of an input") as caught:
        built(["x' = -x + u", "e = x + u'"], start="x = 0", inputs="u = { within = [-1, 1] }", top='watch = ["e"]')
    assert caught.value.faults[0].key == "watch[0]"


def test_a_definition_of_a_replaced_rate_gives_way_too():
    system = built(["x'' = -x' - x + u''", "y' = e - y", "e = 2*x'"], duration="6",
                   start="x = 0\n\"x'\" = 0\ny = 0", inputs='u = "sin(t)"', top='watch = ["x", "y"]')  # fmt: skip
    expected = solve_ivp(
        lambda t, s: [s[1], -s[1] - s[0] - np.sin(t), 2 * s[1] - s[2]], (0, 6), [0, 0, 0], t_eval=T,
        rtol=1e-11, atol=1e-13,
    ).y  # fmt: skip
    found = simulate(system, T)
    assert np.allclose(found["x"], expected[0], atol=1e-7)
    assert np.allclose(found["y"], expected[2], atol=1e-7)


def test_a_recording_is_never_differentiated():
    recording = Recording("road.csv", (0.0, 2.0, 6.0), (0.5, 1.0, 0.0))
    problem = Problem(
        "t", (parse_equation("x' = -2*x + 3*u'", 0),), duration=Fraction(6), start={"x": Fraction(5)},
        inputs={"u": Input("u", recording=recording)},
    )  # fmt: skip
    system = build_system(problem)
    first = solve_ivp(lambda t, s: -2 * s + 0.75, (0, 2), [5], t_eval=T[T <= 2], rtol=1e-11, atol=1e-13).y[0]
    then = solve_ivp(lambda t, s: -2 * s - 0.75, (2, 6), first[-1:], t_eval=T[T > 2], rtol=1e-11, atol=1e-13).y[0]
    assert np.allclose(simulate(system, T)["x"], np.concatenate([first, then]), atol=1e-7)
