"""Values, scale factors and loops of whole sizings."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from itertools import pairwise
from math import isclose

import numpy as np
import pytest

from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.target import target_of
from patchplan.equation.problem import Build
from patchplan.equation.system import System
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.ranges import find_ranges
from patchplan.reach.reference import find_reach
from patchplan.sensitivity import find_sensitivity
from patchplan.sizing.size import size
from tests.systems import knob, lorenz, system, term, van_der_pol


def sized(made: System, *, build: Build | None = None, **options):
    build = build or Build()
    target = target_of(build, load_catalogue({}))
    reach = find_reach(made, {}, build)
    form = Form(made)
    patch = build_patch(form, hold=build.run != "free")
    ranges = find_ranges(patch, form, reach)
    sensitivity = find_sensitivity(form, patch, ranges)
    return patch, target, size(form, patch, ranges, sensitivity, target, run=build.run, **options)


def gain(stage, index, sizing, target):
    """Realised gain of a wire, from the values alone: 1/(R*C) slowed by the shared switch, or Rf/R."""
    values = sizing.stages[stage.name]
    leg = values.legs[index].transfer
    if stage.kind == "integrator":
        conductance = sum(1 / x.transfer for x in values.legs)
        return 1 / (leg * values.capacitor * (1 + target.switch_on * conductance))
    return values.feedback / leg


@pytest.mark.parametrize("made", [van_der_pol(), replace(lorenz(), duration=Fraction(5))])
def test_values_make_the_coefficients(made):
    """Magnitude and time scaling (Korn and Korn 1956): gain = |a| * S / S_source / T, recomputed from the parts."""
    patch, target, sizing = sized(made)
    listed = {c.at: c for c in sizing.coefficients}
    for stage in patch.stages:
        if stage.kind != "integrator":
            continue
        for index, wire in enumerate(stage.wires):
            ratio = sizing.scales[stage.node].volts_per_unit / sizing.scales[wire.source].volts_per_unit
            realised = gain(stage, index, sizing, target) * sizing.time_scale / ratio
            row = listed[f"{stage.node}<-{wire.source}"]
            # Finite bandwidth slows the stage by up to sum(gains)/w_t, which the listed number includes.
            assert isclose(realised, abs(row.realised), rel_tol=1e-4)
            assert abs(row.error_percent) < 0.5


def test_values_are_purchasable_and_inside_limits():
    patch, target, sizing = sized(van_der_pol())
    for stage in patch.stages:
        values = sizing.stages[stage.name]
        for leg in values.legs:
            assert set(leg.resistors) <= set(target.resistors)
        if stage.kind == "integrator":
            assert values.capacitor in target.capacitors
            assert values.start is not None


@pytest.mark.parametrize("made", [van_der_pol(), replace(lorenz(), duration=Fraction(5))])
def test_swings_use_half_to_most_of_the_limit(made):
    patch, _, sizing = sized(made)
    for stage in patch.stages:
        if stage.kind == "integrator":
            scale = sizing.scales[stage.node]
            assert 0.5 - 1e-9 <= scale.peak_volts / scale.limit_volts <= 0.95 + 1e-9


def test_start_volts_follow_from_the_start_resistors():
    patch, target, sizing = sized(van_der_pol())
    stage = next(s for s in patch.stages if s.signal == "y")
    first, second = sizing.stages[stage.name].start
    assert isclose(abs(sizing.stages[stage.name].start_volts), target.reference * second / first)
    wanted = 2 * sizing.scales[stage.node].volts_per_unit
    assert isclose(abs(sizing.stages[stage.name].start_volts), wanted, rel_tol=5e-3)


def test_thinking_longer_is_never_worse_on_lorenz():
    """The figure of merit is the coefficient error; nearest values make 3 % here."""
    made = replace(lorenz(), duration=Fraction(5))
    errors = []
    for think in ("low", "high"):
        _, _, sizing = sized(made, think=think)
        errors.append(max(abs(e) for e in sizing.loop_errors))
    assert errors[1] < 0.003
    assert errors[1] <= errors[0] * 1.5


def test_slow_real_time_gains_get_t_legs():
    """Time constants of 50 s need 5e7 ohm at 1 uF: no single resistor of the series reaches that."""
    made = system({"x": 1}, {"x": [term("-1/50", "x")]}, duration=200)
    _, target, sizing = sized(made, speed="real time")
    leg = sizing.stages["I1"].legs[0]
    assert len(leg.resistors) == 3
    assert leg.transfer > target.resistors[-1]
    assert not sizing.faults


def test_out_of_reach_is_a_sentence():
    made = system({"x": 1}, {"x": [term("-1/1000000", "x")]}, duration=2_000_000)
    _, _, sizing = sized(made, speed="real time")
    assert sizing.faults == (
        "The speed asked for is too slow: one unit of time would take 1 s on the board, and no more than 502 µs can "
        "be built (largest network of three resistors times largest capacitor, 502 s, at I1). The window ends at 33.5 "
        "µs already (offsets of TL07x through networks of three resistors, at 1 % of peak), where errors begin to "
        "grow. The nearest inside the window is speed = 29900 under [build]; wider value limits may mend it, too.",
    )


def test_an_op_amp_too_slow_is_not_mended_by_values():
    made = system({"x": 1, "v": 1}, {"x": [term(1, "v")], "v": [term(-1, "x")]}, duration=60)
    _, _, sizing = sized(made, speed=10.0**9)
    (fault,) = sizing.faults
    assert "can be built (smallest resistor times smallest capacitor" in fault
    assert "The window ends at" in fault
    assert "(bandwidth of TL07x" in fault
    assert fault.endswith("under [build]; wider value limits and faster op amps or multipliers may mend it, too.")


def test_gains_too_far_apart_name_the_input():
    made = system({"x": 1, "y": 1}, {"x": [term(-1, "x"), term("1/1000000", "y")], "y": [term(-1, "y")]}, duration=5)
    _, _, sizing = sized(made)
    assert sizing.faults[0].startswith("No purchasable value reaches the input x of I1: it asks for a gain ")


def test_dc_limit_only_in_a_free_run_with_a_slow_mode():
    integrator = system({"x": 0}, {"x": [term(-1, "x"), term(1)]}, duration=20)
    free = Build(run="free")
    assert sized(integrator, build=free)[2].stages["I1"].feedback == 0
    pure = system({"x": 0}, {"x": [term(1, "u")]}, sources=[source("u", "cos(2*t)")], duration=200)
    assert sized(pure, build=free)[2].stages["I1"].feedback > 0
    # Over a tenth of that run the drift is allowed, and the resistor would do more harm.
    brief = system({"x": 0}, {"x": [term(1, "u")]}, sources=[source("u", "cos(2*t)")], duration=20)
    assert sized(brief, build=free)[2].stages["I1"].feedback == 0
    _, _, once = sized(pure)
    assert once.stages["I1"].feedback == 0
    assert any("holds what offsets push into it" in note for note in once.notes)


def test_an_oscillator_gets_no_dc_limit():
    made = system({"x": 1, "y": 0}, {"x": [term(1, "y")], "y": [term(-1, "x")]})
    _, _, sizing = sized(made, build=Build(run="free"))
    assert [sizing.stages[n].feedback for n in ("I1", "I2")] == [0, 0]


def source(name, formula):
    from patchplan.equation.syntax import parse_expression
    from patchplan.equation.system import Source
    from patchplan.equation.waveform import Waveform

    return Source(name, Waveform(parse_expression(formula)))


def test_knob_feedback_is_the_nominal_gain():
    made = system({"x": 1}, {"x": [term(-1, "x", knobs=["g"])]}, knobs=[knob("g", 1, 2, 4)])
    patch, _, sizing = sized(made)
    stage = next(s for s in patch.stages if s.knob)
    values = sizing.stages[stage.name]
    into, out = sizing.scales[stage.wires[0].source], sizing.scales[stage.node]
    # Values make up for finite gain and bandwidth, some 0.02 % here.
    wanted = 2 * out.volts_per_unit / into.volts_per_unit
    assert isclose(values.feedback / values.legs[0].transfer, wanted, rel_tol=5e-4)


def test_stages_under_one_knob_have_one_feedback():
    rows = {"x": [term(-1, "x", knobs=["g"])], "y": [term(1, "x"), term(-1, "y", knobs=["g"])]}
    patch, _, sizing = sized(system({"x": 1, "y": 0}, rows, knobs=[knob("g", 1, 2, 4)]))
    feedback = {sizing.stages[s.name].feedback for s in patch.stages if s.knob}
    assert sum(s.knob == "g" for s in patch.stages) == 2
    assert len(feedback) == 1


def test_same_input_gives_the_same_values():
    assert sized(van_der_pol())[2] == sized(van_der_pol())[2]


def test_large_boards_take_the_linear_search():
    """A ladder of 60 states: T_i' = T_(i-1) - 2 T_i + T_(i+1)."""
    names = [f"T{i}" for i in range(60)]
    rows = {n: [term(-2, n)] for n in names}
    for low, high in pairwise(names):
        rows[low].append(term(1, high))
        rows[high].append(term(1, low))
    rows["T0"].append(term(1))
    made = system(dict.fromkeys(names, 0), rows, watch=["T59"], duration=100)
    _, _, sizing = sized(made)
    assert not sizing.faults
    assert np.median([abs(c.error_percent) for c in sizing.coefficients]) < 1.0


def test_content_below_the_dc_limit_decade_is_told():
    """A free integrator of two sines: the slow one lies within a decade of the corner, the fast one does not.

    A DC-limited integrator is 0.5 % low and 5.7 degrees off a decade above its corner (common practice, no source).
    """
    both = "20*cos(20*t) + cos(t/2)"
    made = system({"x": 0}, {"x": [term(-1, "u")]}, sources=[source("u", both)], duration=500)
    _, _, sizing = sized(made, build=Build(run="free"))
    assert any("of its content below" in note for note in sizing.notes)
    fast = system({"x": 0}, {"x": [term(-1, "u")]}, sources=[source("u", "cos(200*t)")], duration=10)
    _, _, sizing = sized(fast, build=Build(run="free"))
    assert not any("of its content below" in note for note in sizing.notes)


def test_a_speed_outside_the_window_is_told():
    _, _, sizing = sized(van_der_pol(), speed=1e5)
    (note,) = [n for n in sizing.notes if "outside the window" in n]
    assert note == sizing.outside
    assert note.startswith("Runs outside the window: a unit of time takes 10 µs on the board, less than its fast end ")
    assert "(bandwidth of AD633, which costs 1 % of peak); this alone costs about " in note
    # Lag is proportional to speed, so that 1 % at the end of the window scales with the distance from it.
    cost = float(note.partition("costs about ")[2].split()[0])
    assert cost == pytest.approx(1e5 * sizing.window[0], rel=0.05)
    # The speed that the sentence names is inside, and no note is left.
    nearest = float(note.rpartition("speed = ")[2].split()[0])
    assert sizing.window[0] <= 1 / nearest <= 1.01 * sizing.window[0]
    assert not any("outside the window" in n for n in sized(van_der_pol(), speed=nearest)[2].notes)
    assert not any("outside the window" in n for n in sized(van_der_pol(), speed=100.0)[2].notes)


def test_ends_of_the_window_are_hard_or_soft():
    """Beyond a soft end a board can be built and tells so; beyond a hard one it cannot."""
    made = system({"x": 1}, {"x": [term("-1/300", "x")]}, duration=1200)
    soft = sized(made, speed="real time")[2]
    assert not soft.faults
    assert soft.outside.startswith("Runs outside the window: ")
    assert next(x for x in soft.speed_limits if x.end == "slow").hard is False
    assert [x.figure for x in soft.speed_limits if x.hard] == ["R × C", "R × C"]
    least = next(x.time_scale for x in soft.speed_limits if x.hard and x.end == "fast")
    most = next(x.time_scale for x in soft.speed_limits if x.hard and x.end == "slow")
    for speed in (0.5 / most, 2.0 / least):
        (fault,) = sized(made, speed=speed)[2].faults
        assert "can be built (" in fault
