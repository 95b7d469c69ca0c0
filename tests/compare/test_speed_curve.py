"""The curve of error and spread against speed: against full simulations, and what is said of real time."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.target import target_of
from patchplan.compare.predict import predicted_error
from patchplan.compare.real_time import judged
from patchplan.equation.problem import Build
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.ranges import find_ranges
from patchplan.reach.reference import find_reach
from patchplan.sensitivity import find_sensitivity
from patchplan.sizing.records import Sizing, Target
from patchplan.sizing.speed import choose_speed
from tests.compare.exact_boards import checked, exact_board
from tests.plans import Plans
from tests.systems import system, term

NAMES = ("van_der_pol", "seat_suspension")


@pytest.mark.parametrize("name", NAMES)
def test_the_curve_is_what_full_simulations_show(plans: Plans, name: str) -> None:
    """Both ends of the window and its middle; tests/bench/bench_speed.py takes six problems at seven speeds each."""
    plan = plans.of(name)
    for time_scale in np.geomspace(*plan.sizing.window, 3):
        board = exact_board(plan, float(time_scale))
        found, _ = predicted_error(plan.form.system, plan.patch, plan.ranges, plan.sensitivity, board, plan.target)
        simulated = checked(plan, board).max_error_percent
        assert 1 / 1.5 < found / simulated < 1.5, time_scale


@pytest.mark.parametrize("name", NAMES)
def test_the_curve_holds_the_plan_and_the_window(plans: Plans, name: str) -> None:
    plan = plans.of(name)
    curve = plan.speed_curve
    assert curve is not None
    assert list(curve.time_scales) == sorted(curve.time_scales)
    assert curve.time_scales[0] == pytest.approx(plan.sizing.window[0])
    assert curve.time_scales[-1] == pytest.approx(plan.sizing.window[1])
    own = curve.time_scales.index(plan.sizing.time_scale)
    assert curve.chosen == (curve.error[own], curve.spread[own])
    # Tolerances, offsets and multipliers are those of the check; strays, leakage and switches come on top.
    assert plan.verdict.spread_percent <= curve.chosen[1] <= 1.1 * plan.verdict.spread_percent
    table = np.array(list(curve.parts.values()))
    assert (np.array(curve.error) <= table.sum(axis=0) * (1 + 1e-9)).all()
    assert {"bandwidth", "finite gain", "bias current", "slew"} <= set(curve.parts)
    assert {"resistors", "capacitors", "offsets", "strays", "switch leakage", "switch resistance"} <= set(curve.spreads)


def test_the_planner_takes_a_speed_near_the_best_of_the_curve(plans: Plans) -> None:
    """Fastest within 1e-4 of peak of the least, or 10 % above it (sizing/speed.py)."""
    for name in NAMES:
        curve = plans.of(name).speed_curve
        assert curve is not None
        assert curve.chosen[0] <= 2.0 * min(curve.error) + 0.02


@pytest.fixture(scope="module")
def target() -> Target:
    return target_of(Build(), load_catalogue({}))


def judgement(rate: int | Fraction, target: Target) -> tuple[str, str]:
    """Of a decay at that rate [1/s] over five time constants, with parts for a window of its own."""
    rate = Fraction(rate)
    made = system({"x": 1}, {"x": [term(-rate, "x")]}, duration=5 / rate)
    reach = find_reach(made, {}, Build())
    form = Form(made)
    patch = build_patch(form)
    ranges = find_ranges(patch, form, reach)
    parts = (form, patch, ranges, find_sensitivity(form, patch, ranges))
    pace = choose_speed(*parts, target)
    return judged(*parts, target, Sizing(pace.chosen, pace.window, pace.limits, {}, {}, ()), (0.01, 1.2))


def test_real_time_inside_the_window_is_possible(target: Target) -> None:
    assert judgement(1, target) == (
        "possible",
        "Real time is possible, with an error of 0.01 % and a spread of 1.2 % as predicted.",
    )


def test_a_slow_plant_is_possible_with_larger_values(target: Target) -> None:
    """20 s: 20 Mohm at 1 uF; offsets of 3 mV allow 33 s of R times C, ten times that with film of 10 uF."""
    word, sentence = judgement(Fraction(1, 50), target)
    assert word == "with other parts"
    assert sentence == (
        "Real time lies outside the window (offsets of TL07x through networks of three resistors, at 1 % of peak), and "
        "inside with capacitors up to 10 µF."
    )
    larger = replace(target, capacitors=(*target.capacitors, 1e-5))
    assert judgement(Fraction(1, 50), larger)[0] == "possible"


def test_a_slower_plant_is_possible_with_another_op_amp(target: Target) -> None:
    """With values at their largest already, a hundredth of the offset is what is left to change."""
    large = replace(target, capacitors=(*target.capacitors, 1e-5), resistors=(*target.resistors, 1e7))
    word, sentence = judgement(Fraction(1, 5000), large)
    assert word == "with other parts"
    name = sentence.rpartition("inside with ")[2].split()[0]
    other = next(a for a in target.other_op_amps if a.name == name)
    assert other.offset < target.op_amp.offset
    assert sentence.endswith(f"inside with {name} in place of TL07x.")
    assert judgement(Fraction(1, 5000), replace(large, op_amp=other))[0] == "possible"


def test_beyond_a_soft_end_real_time_is_outside_and_not_impossible(target: Target) -> None:
    large = replace(target, capacitors=(*target.capacitors, 1e-5), resistors=(*target.resistors, 1e7), other_op_amps=())
    word, sentence = judgement(Fraction(1, 5000), large)
    assert word == "outside"
    assert sentence.startswith(
        "Real time is outside the window, where errors are larger: a unit of time would take 1 s"
    )
    assert "offsets of TL07x through networks of three resistors" in sentence


@pytest.mark.parametrize(("rate", "least"), [(Fraction(1, 10**8), "no more"), (Fraction(10**9), "no less")])
def test_impossible_names_what_is_in_the_way(target: Target, rate: Fraction, least: str) -> None:
    word, sentence = judgement(rate, target)
    assert word == "impossible"
    assert sentence.startswith("Real time is impossible: a unit of time would take 1 s, and ")
    assert sentence.count(f"{least} than") == 2
    assert "; with the best parts known " in sentence


def test_other_parts_take_the_supply(target: Target) -> None:
    """Six of the catalogue's ten op amps take 30 V; two multipliers are left beside the chosen one."""
    names = {a.name for a in target.other_op_amps}
    assert "OPA4140" in names
    assert not names & {"TL07x", "OPA4340", "MCP6004"}
    assert {m.name for m in target.other_multipliers} == {"MPY634", "generic_multiplier_10_v"}
