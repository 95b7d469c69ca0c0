"""The Reference and its ranges against published cases and closed forms."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from patchplan.equation.problem import Build, Parameter
from patchplan.equation.system import Source
from patchplan.equation.tree import Binary, Call, Name, Number
from patchplan.equation.waveform import Waveform
from patchplan.errors import ProblemFaults
from patchplan.reach.curves import resample
from patchplan.reach.reference import find_reach
from tests.systems import knob, lorenz, system, term, van_der_pol


def reach_of(made, stated=None):
    return find_reach(made, stated or {}, Build())


def step_at(time):
    return Source("u", Waveform(Call("step", (Binary("-", Name("t"), Number(Fraction(time))),))))


def test_linear_interpolation_is_enough():
    reach = reach_of(van_der_pol())
    reference = reach.reference
    assert 600 <= reference.times.size <= 20000
    fine = np.linspace(0, 20, 20001)
    for row, rate in zip(reference.values, reference.rates, strict=True):
        exact = resample(reference.times, row, rate, fine)
        assert np.abs(np.interp(fine, reference.times, row) - exact).max() < 1e-4 * np.abs(row).max()


def test_rates_are_the_slopes():
    reference = reach_of(lorenz()).reference
    x, dx = reference.values[0], reference.rates[0]
    np.testing.assert_allclose(dx, 10 * (reference.values[1] - x), atol=1e-9 * np.abs(dx).max())


def test_jump_appears_twice_and_splits_the_run():
    made = system({"x": 0}, {"x": [term(-1, "x"), term(1, "u")]}, sources=[step_at(1)], duration=3)
    reach = reach_of(made)
    times, u, x = reach.reference.times, reach.reference.of("u"), reach.reference.of("x")
    assert (times == 1.0).sum() == 2
    before = int(np.flatnonzero(times == 1.0)[0])
    assert u[before] == 0.0
    assert u[before + 1] == 1.0
    assert reach.reference.jumps == (1.0,)
    np.testing.assert_allclose(x, np.where(times > 1, 1 - np.exp(1 - times), 0.0), atol=1e-9)


def test_nonlinear_run_is_restarted_at_a_jump():
    # x' = u - x^2 after the jump: tanh (separation of variables).
    made = system({"x": 0}, {"x": [term(-1, "x", "x"), term(1, "u")]}, sources=[step_at(1)], duration=3)
    reference = reach_of(made).reference
    expected = np.where(reference.times > 1, np.tanh(reference.times - 1), 0.0)
    np.testing.assert_allclose(reference.of("x"), expected, atol=1e-9)


def test_linear_ranges_are_proved_between_samples():
    # x'' = -x: amplitude sqrt(3^2 + 4^2).
    made = system(
        {"x": 3, "v": 4}, {"x": [term(1, "v")], "v": [term(-1, "x")]}, signals={"sum": [term(1, "x"), term(1, "v")]}
    )
    found = reach_of(made).ranges
    assert {r.known_by for r in found.values()} == {"proved"}
    np.testing.assert_allclose([found["x"].high, found["v"].low, found["sum"].high], [5, -5, 50**0.5], rtol=1e-8)


def test_nonlinear_margin_comes_from_boards_within_tolerance():
    made = van_der_pol()
    tight = find_reach(made, {}, Build(resistor_tolerance=0.001, capacitor_tolerance=0.001)).ranges["y'"]
    loose = find_reach(made, {}, Build(resistor_tolerance=0.05, capacitor_tolerance=0.05)).ranges["y'"]
    assert tight.known_by == "simulated"
    assert "tolerance" in tight.reason
    assert 0 < 5 * tight.margin < loose.margin


def test_blow_up_says_when():
    # x' = x^2 from 1 leaves every bound at t = 1.
    with pytest.raises(ProblemFaults, match=r"grows without bound at t = 1\.") as caught:
        reach_of(system({"x": 1}, {"x": [term(1, "x", "x")]}, duration=2))
    assert len(caught.value.faults) == 1


def test_linear_growth_beyond_floats_is_refused():
    with pytest.raises(ProblemFaults, match="grows without bound"):
        reach_of(system({"x": 1}, {"x": [term(100, "x")]}, duration=20))


def test_stated_ranges_win_and_a_run_beyond_them_warns():
    made = system({"x": 1}, {"x": [term(-1, "x")]})
    reach = reach_of(made, {"x": (Fraction(0), Fraction(1, 2))})
    assert reach.ranges["x"].known_by == "stated"
    assert reach.ranges["x"].high == 0.5
    assert len(reach.warnings) == 1
    assert "x is stated to stay within 0 to 0.5, but reaches" in reach.warnings[0]
    assert reach_of(made, {"x": (Fraction(-1), Fraction(2))}).warnings == ()


def test_adjustable_box_covers_its_corners():
    # x'' = -c x' - x from (1, 0): first undershoot exp(-pi z / sqrt(1 - z^2)) with z = c/2, deepest at the least c.
    made = system(
        {"x": 1, "v": 0},
        {"x": [term(1, "v")], "v": [term(-1, "x"), term(-1, "v", knobs=["c"])]},
        knobs=[knob("c", 0.2, 1, 1.5)],
    )
    made = replace(made, adjustable=(Parameter("c", Fraction(1), Fraction(1, 5), Fraction(3, 2)),))
    reach = reach_of(made)
    z = 0.1
    found = reach.ranges["x"]
    deepest = -np.exp(-np.pi * z / np.sqrt(1 - z * z))
    assert found.low + found.margin == pytest.approx(deepest, rel=1e-4)
    assert "adjustable" in found.reason
    assert any(run.knobs["c"] == 0.2 for run in reach.runs)
    assert reach.runs[0].knobs["c"] == 1.0


def test_searched_waveforms_are_never_called_proved():
    made = system(
        {"x": 0, "v": 0},
        {"x": [term(1, "v")], "v": [term("-3/10", "v"), term(-1, "x"), term("-1/5", "x", "x", "x"), term(1, "u")]},
        sources=[Source("u", None, (Fraction(-1), Fraction(1)))],
        watch=["x"],
        duration=20,
    )
    reach = reach_of(made)
    found = reach.ranges["x"]
    assert found.known_by == "simulated"
    assert "search" in found.reason
    reached = np.abs(reach.reference.of("x")).max()
    # A constant input settles at the root of x + x^3/5 = 1; resonance goes well beyond it.
    assert reached > 2 * 0.87
    assert found.peak >= reached
    assert reach.ranges["u"].known_by == "proved"


def test_same_input_gives_same_numbers():
    first, second = reach_of(van_der_pol()), reach_of(van_der_pol())
    assert first.ranges == second.ranges
    assert first.reference.values.tobytes() == second.reference.values.tobytes()
