"""Adjustable parameters: one function, one knob."""

from fractions import Fraction

import numpy as np
import pytest
import sympy

from patchplan.errors import ProblemFaults
from tests.equation.simulated import built

C = "c = { from = 1, to = 2, value = 1.5 }\n"


def terms(system, name):
    row = next(r for r in (*system.rows, *system.signals) if r.name == name)
    return {(t.knobs, t.factors): t.coefficient for t in row.terms}


def test_a_product_of_two_adjustable_parameters_is_one_term_with_two_knobs():
    parameters = C + "m = { from = 2, to = 4, value = 3 }\nk = 5"
    system = built(["m*x'' = -k*x - c*x'"], parameters=parameters, start='x = 1\n"x\'" = 0')
    assert terms(system, "x'") == {(("1/m",), (("x", 1),)): -5, (("1/m", "c"), (("x'", 1),)): -1}
    assert {k.name: (k.low, k.value, k.high) for k in system.knobs} == {
        "c": (1, Fraction(3, 2), 2), "1/m": (Fraction(1, 4), Fraction(1, 3), Fraction(1, 2)),
    }  # fmt: skip


def test_one_parameter_in_several_functions_of_a_coefficient_is_one_knob():
    system = built(["x' = -(3 + 2*c + 4*c^2)*x"], parameters=C, start="x = 1")
    assert terms(system, "x") == {((), (("x", 1),)): -3, (("c + 2*c^2",), (("x", 1),)): -2}
    (knob,) = system.knobs
    assert (knob.low, knob.value, knob.high) == (3, 6, 10)


def test_an_inner_extreme_of_a_knob_is_found():
    system = built(["x' = -(2*c^2 - 6*c)*x"], parameters=C.replace("from = 1", "from = 0"), start="x = 1")
    (knob,) = system.knobs
    # 2 c^2 - 6 c has its least value -4.5 at c = 1.5; the knob is it over its first coefficient.
    factor = terms(system, "x")[(knob.name,), (("x", 1),)]
    assert sorted([-factor * knob.low, -factor * knob.high]) == pytest.approx([-4.5, 0.0], abs=1e-9)


def test_a_pole_inside_the_range_is_a_fault():
    with pytest.raises(ProblemFaults) as caught:
        built(["x' = -x/c"], parameters="c = { from = -1, to = 2, value = 1 }", start="x = 1")
    assert caught.value.faults[0].key == "parameters.c"


def test_a_mass_matrix_of_adjustable_parameters_is_sympys_inverse():
    parameters = "a = { from = 1, to = 2, value = 1.5 }\nb = { from = 3, to = 5, value = 4 }"
    system = built(
        ["(a + b)*x' + b*y' + z' = x", "b*x' + (a*b + 1)*y' = -y", "a*z' + y' = 2*z"],
        parameters=parameters, start="x = 1\ny = 1\nz = 1",
    )  # fmt: skip
    a, b = sympy.symbols("a b")
    inverse = sympy.Matrix([[a + b, b, 1], [b, a * b + 1, 0], [0, 1, a]]).inv() * sympy.diag(1, -1, 2)
    gains = {k.name: float(k.value) for k in system.knobs}
    for i, state in enumerate("xyz"):
        for j, other in enumerate("xyz"):
            found = sum(
                float(c) * np.prod([gains[k] for k in knobs])
                for (knobs, factors), c in terms(system, state).items()
                if factors == ((other, 1),)
            )
            assert found == pytest.approx(float(inverse[i, j].subs({a: 1.5, b: 4})), rel=1e-12, abs=1e-14)


def test_a_linear_definition_with_a_knob_used_twice_is_one_stage():
    system = built(["x' = -f", "y' = f - y", "f = c*(x - y)"], parameters=C, start="x = 1\ny = 0")
    assert [r.name for r in system.signals] == ["f"]
    assert terms(system, "x") == {((), (("f", 1),)): -1}


def test_a_function_of_a_parameter_is_a_knob():
    system = built(["x' = -sqrt(c)*x + c*sin(t)"], parameters=C, start="x = 1")
    assert terms(system, "x") == {(("sqrt(c)",), (("x", 1),)): -1, (("c",), (("sin(t)", 1),)): 1}
    assert float(next(k for k in system.knobs if k.name == "sqrt(c)").high) == pytest.approx(2**0.5)


def test_a_function_of_time_with_a_knob_inside_is_refused():
    with pytest.raises(ProblemFaults, match="adjustable parameter"):
        built(["x' = -x + sin(c*t)"], parameters=C, start="x = 1")
