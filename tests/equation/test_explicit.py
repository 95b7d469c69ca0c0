"""The explicit system against sympy's solution of the same equations."""

from fractions import Fraction

import numpy as np
import pytest
import sympy

from patchplan.equation.explicit import build_system, expanded
from patchplan.equation.reader import read_problem
from patchplan.equation.system import Term
from patchplan.errors import ProblemFaults
from tests.cases.convert import problem_text, read_cases
from tests.equation.simulated import built, simulate

CASES = read_cases()
REFUSED = {
    "detest_D1_two_body_ecc_0p1": "root of",
    "pendulum_1rad_one_period": "sin of",
    "gompertz_growth_log": "log of",
    "diode_rc_forced": "exp of",
}


def rows(system):
    return {row.name: {t.factors: t.coefficient for t in row.terms} for row in system.rows}


@pytest.mark.parametrize("name", sorted(set(CASES) - set(REFUSED)))
def test_rates_at_the_start_are_those_of_the_equations(name):
    case = CASES[name]
    system = build_system(read_problem(problem_text(case)))
    parameters = {sympy.Symbol(k): v for k, v in case["parameters_numeric"].items()}
    start = case["initial_numeric"]
    values = {s.name: float(s.start) for s in system.states}
    assert values == pytest.approx(start, rel=1e-12)
    known = values | {s.name: s.waveform.values(np.zeros(1))[0] for s in system.sources}
    for equation in case["equations"]:
        left, right = equation.split("=")
        highest = left.strip()
        # sympy reads the case's own text, primes written as _p.
        names = {n.replace("'", "_p"): n for n in start}
        symbols = {n: sympy.Symbol(n) for n in [*case["parameters_numeric"], *names, "t"]}
        expected = sympy.sympify(right.replace("'", "_p").replace("^", "**"), locals=symbols)
        expected = expected.subs({**parameters, "t": 0, **{k: start[v] for k, v in names.items()}})
        row = next(r for r in expanded(system) if r.name + "'" == highest)
        found = sum(float(t.coefficient) * np.prod([known[n] ** p for n, p in t.factors]) for t in row.terms)
        assert found == pytest.approx(float(expected), rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("name", sorted(REFUSED))
def test_functions_of_states_are_refused_with_a_sentence(name):
    with pytest.raises(ProblemFaults) as caught:
        build_system(read_problem(problem_text(CASES[name])))
    fault = caught.value.faults[0]
    assert fault.found.startswith("not built in this version: ")
    assert REFUSED[name] in fault.found
    assert fault.key == "equations[0]"
    assert fault.span is not None


@pytest.mark.parametrize("seed", range(8))
def test_random_mass_matrices_are_solved_as_sympy_solves_them(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 5))
    mass = np.where(rng.random((n, n)) < 0.6, rng.integers(-4, 5, (n, n)), 0) + 5 * np.eye(n, dtype=int)
    stiff, damp = rng.integers(-3, 4, (n, n)), rng.integers(-3, 4, (n, n))
    mass[rng.integers(n)] *= 2
    order = rng.permutation(n)
    equations = [
        " + ".join(f"({mass[i, j]})*x{j}''" for j in range(n))
        + " = "
        + " + ".join(f"({stiff[i, j]})*x{j}/7 - ({damp[i, j]})*x{j}'" for j in range(n))
        for i in order
    ]
    start = "\n".join(f'x{j} = 1\n"x{j}\'" = 0' for j in range(n))
    found = rows(built(equations, start=start))
    expected_k = sympy.Matrix(mass.tolist()).inv() * sympy.Matrix(stiff.tolist()) / 7
    expected_d = -sympy.Matrix(mass.tolist()).inv() * sympy.Matrix(damp.tolist())
    for i in range(n):
        wanted = {((f"x{j}", 1),): Fraction(str(expected_k[i, j])) for j in range(n)}
        wanted |= {((f"x{j}'", 1),): Fraction(str(expected_d[i, j])) for j in range(n)}
        assert found[f"x{i}'"] == {k: v for k, v in wanted.items() if v}
        assert found[f"x{i}"] == {((f"x{i}'", 1),): 1}


def test_a_linear_definition_is_put_in_and_listed_where_watched():
    system = built(["x' = -2*e", "e = x - r", "y' = e - y"], start="x = 0\ny = 0", inputs='r = "sin(t)"',
                   top='watch = ["e"]')  # fmt: skip
    assert rows(system)["x"] == {(("x", 1),): -2, (("r", 1),): 2}
    assert [str(r) for r in system.signals] == ["e: -1*r + 1*x"]


def test_a_definition_in_a_product_is_kept():
    system = built(["x' = -e*x", "e = x - y", "y' = e^2"], start="x = 1\ny = 0")
    assert rows(system)["y"] == {(("e", 2),): 1}
    assert [r.name for r in system.signals] == ["e"]
    assert {r.name: str(r) for r in expanded(system)}["y"] == "y: 1*x^2 + 1*y^2 + -2*x*y"


def test_a_product_that_two_rows_use_is_kept_and_one_used_once_is_not():
    system = built(["x' = -p", "p = x*y", "y' = p - q", "q = x*x"], start="x = 1\ny = 0")
    assert [r.name for r in system.signals] == ["p"]
    assert rows(system)["y"] == {(("p", 1),): 1, (("x", 2),): -1}


def test_derivatives_of_definitions_are_taken_by_rule():
    system = built(["m*z'' = -9*d - 2*d' ", "d = z^2 + 3*t"], parameters="m = 4", start="z = 1\n\"z'\" = 0",
                   top='watch = ["d\'"]')  # fmt: skip
    expected = {
        (("z", 2),): Fraction(-9, 4),
        (("t", 1),): Fraction(-27, 4),
        (("z", 1), ("z'", 1)): -1,
        (): Fraction(-3, 2),
    }
    assert rows(system)["z'"] == expected
    signals = {r.name: {t.factors: t.coefficient for t in r.terms} for r in system.signals}
    assert signals["d'"] == {(("z", 1), ("z'", 1)): 2, (): 3}


def test_constants_come_out_of_functions_of_time():
    system = built(["x' = u*sin(w*t) - (1 - 0.25/(t + 1)^2)*x"], parameters="u = 3\nw = 2", start="x = 0")
    assert rows(system)["x"] == {
        (("sin(w*t)", 1),): 3, (("x", 1),): -1, (("1/(t + 1)^2", 1), ("x", 1)): Fraction(1, 4),
    }  # fmt: skip
    assert [(s.name, s.external) for s in system.sources] == [("sin(w*t)", True), ("1/(t + 1)^2", True)]
    t = np.linspace(0, 3, 7)
    assert np.allclose(system.sources[0].waveform.values(t), np.sin(2 * t))
    assert np.allclose(system.sources[1].waveform.values(t), 1 / (t + 1) ** 2)


def test_all_that_multiplies_one_signal_is_one_source():
    system = built(["x' = -x*(2 + u*cos(t) + 4*exp(-t))"], start="x = 1", inputs='u = "sin(t) + 2"')
    assert len(system.sources) == 1
    t = np.linspace(0, 10, 101)
    closed = np.exp(-2 * t - np.sin(t) ** 2 / 2 - 2 * np.sin(t) + 4 * np.exp(-t) - 4)
    assert np.allclose(simulate(system, t)["x"], closed, atol=1e-9)


def test_steps_stay_on_the_board_and_one_at_the_start_is_a_constant():
    system = built(["x' = -x + 3*step(t - 1) + 2*step(t) - F + step(t + 1)"], start="x = 0",
                   inputs='F = "-785*step(t - 0.5)"')  # fmt: skip
    assert rows(system)["x"] == {(("x", 1),): -1, (("step(t - 1)", 1),): 3, (("F", 1),): -1, (): 3}
    assert {s.name: s.external for s in system.sources} == {"step(t - 1)": False, "F": False}


def test_inputs_that_arrive_as_they_are_stay_factors():
    system = built(["x' = -x*g^2*cos(t) + g*u"], start="x = 1", inputs='g = { within = [-1, 1] }\nu = "sin(t)"',
                   terminals="u = { volts_per_unit = 2 }")  # fmt: skip
    assert rows(system)["x"] == {(("cos(t)", 1), ("g", 2), ("x", 1)): -1, (("g", 1), ("u", 1)): 1}
    given = {s.name: s for s in system.sources}
    assert given["g"].waveform is None
    assert given["g"].within == (-1, 1)
    assert given["u"].external


def test_every_term_knows_its_place():
    text = "x' = -3*x*y + 2*(y - 1)"
    system = built([text, "y' = 1"], start="x = 0\ny = 0")
    terms = {t.factors: t for t in system.rows[0].terms}
    place = terms[("x", 1), ("y", 1)].origin
    assert text[place.start : place.end] == "-3*x*y"
    place = terms[()].origin
    assert text[place.start : place.end] == "2*(y - 1)"


def test_default_watch_is_all_unknowns_and_polarity_is_kept():
    assert built(["x' = y", "y' = -x"], start="x = 0\ny = 1").watch == (("x", 0), ("y", 0))
    assert built(["x'' = -x"], start='x = 0\n"x\'" = 1', top='watch = ["-x\'"]').watch == (("x'", -1),)


def test_a_long_ladder_builds_row_by_row():
    n = 300
    equations = ["C*T1' = (u - T1)/R - (T1 - T2)/R"]
    equations += [f"C*T{i}' = (T{i - 1} - T{i})/R - (T{i} - T{i + 1})/R" for i in range(2, n)]
    equations += [f"C*T{n}' = (T{n - 1} - T{n})/R"]
    start = "\n".join(f"T{i} = 0" for i in range(1, n + 1))
    system = built(equations, start=start, parameters="C = 2\nR = 3", inputs='u = "step(t - 1)"')
    sixth = Fraction(1, 6)
    assert system.rows[99].terms == (
        Term(-2 * sixth, (("T100", 1),)), Term(sixth, (("T101", 1),)), Term(sixth, (("T99", 1),)),
    )  # fmt: skip


def test_names_that_cancel_inside_a_function_of_time_are_gone():
    system = built(["x' = -x*exp((3 - x) + (x - t)) + (x^0)*sin(t)"], start="x = 1")
    assert rows(system)["x"] == {(("exp(3 - t)", 1), ("x", 1)): -1, (("sin(t)", 1),): 1}


def test_a_highest_derivative_in_a_product_is_put_in_where_other_equations_give_it():
    system = built(["w' = x'*w + a^2", "x' + y' = -x", "x' - y' = y", "a = z''", "z'' = -z"],
                   start="w = 1\nx = 1\ny = 1\nz = 1\n\"z'\" = 0")  # fmt: skip
    half = Fraction(1, 2)
    assert {r.name: {t.factors: t.coefficient for t in r.terms} for r in expanded(system)}["w"] == {
        (("x", 1), ("w", 1))[::-1]: -half, (("w", 1), ("y", 1)): half, (("z", 2),): 1,
    }  # fmt: skip
