"""The horizon: exponential growth of sensitivity and nothing else."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from patchplan.check.horizon import horizon_of
from patchplan.equation.system import Row, System, Term
from patchplan.horizon import growth_exponent
from patchplan.patch.records import Patch, Stage, Wire
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Coefficient, Sizing

TIMES = np.linspace(0.0, 20.0, 401)
STAGE = Stage("x", "integrator", "x", "x", 1, (Wire("y", Fraction(-1)),))
PATCH = Patch((STAGE,), {"x": "x"}, {}, {})


def system(degree: int) -> System:
    row = Row("x", (Term(Fraction(1), (("x", degree),)),))
    return System((), (row,), (), (), (), (), (), Fraction(20), "s", Fraction(1))


def growing(start: np.ndarray, coefficient: np.ndarray) -> Sensitivity:
    none = np.zeros((1, 1, len(TIMES)))
    return Sensitivity(("x",), np.ones(1), TIMES, (("x", 0),), coefficient[None, None, :], ("x",), none, none,
                       {"x": start[None, :]})  # fmt: skip


def sizing(error: float) -> Sizing:
    return Sizing(1.0, (0.0, 1.0), ("", ""), {}, {}, (Coefficient("x<-y", 1.0, 1.0 + error),))


CHAOS = 0.1 * np.exp(0.9 * TIMES) * (1.5 + np.sin(7.0 * TIMES))


def test_exponent_of_exponential_growth_is_found() -> None:
    # 0.9 is about the exponent of Lorenz 1963 (0.906, Sprott 2003).
    assert growth_exponent(growing(CHAOS, CHAOS)) == pytest.approx(0.9, rel=0.03)


@pytest.mark.parametrize(
    "start",
    [TIMES, TIMES**2, TIMES**3, 1.5 + np.sin(TIMES), TIMES * (1.5 + np.sin(TIMES)), 100.0 - 99.9 * np.exp(-TIMES)],
    ids=["phase", "square", "cube", "bounded", "phase of an oscillation", "saturating"],
)
def test_growth_of_other_kinds_has_no_horizon(start: np.ndarray) -> None:
    assert horizon_of(system(2), growing(start, start), PATCH, sizing(0.1)) is None


def test_horizon_is_where_a_tenth_of_a_percent_has_become_one_percent() -> None:
    # |response| * 0.1 % = 1 % where the response is 10.
    response = np.exp(0.9 * TIMES)
    found = horizon_of(system(2), growing(CHAOS, response), PATCH, sizing(1e-5))
    assert found == pytest.approx(np.log(10.0) / 0.9, abs=0.05)


def test_a_larger_coefficient_error_brings_the_horizon_nearer() -> None:
    response = np.exp(0.9 * TIMES)
    found = horizon_of(system(2), growing(CHAOS, response), PATCH, sizing(-4e-3))
    assert found == pytest.approx(np.log(2.5) / 0.9, abs=0.05)


def test_a_linear_system_has_no_horizon() -> None:
    assert horizon_of(system(1), growing(CHAOS, CHAOS), PATCH, sizing(1e-2)) is None
