"""The window of the time scale: each end moves when the figure it names changes, and with no other."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.target import target_of
from patchplan.equation.problem import Build
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.ranges import find_ranges
from patchplan.reach.reference import find_reach
from patchplan.sensitivity import find_sensitivity
from patchplan.sizing.networks import FIRST
from patchplan.sizing.records import Target
from patchplan.sizing.speed import Speed, choose_speed
from patchplan.sizing.speed_errors import middle_scales
from patchplan.sizing.speed_limits import END_ERROR, find_limits, ground_of, network_conductance
from tests.systems import system, term, van_der_pol


@pytest.fixture(scope="module")
def target() -> Target:
    return target_of(Build(), load_catalogue({}))


@pytest.fixture(scope="module")
def stages():
    """A decay: lag hardly matters, so that other figures set the ends."""
    made = system({"x": 1}, {"x": [term(-1, "x")]}, duration=5)
    return parts_of(made)


def parts_of(made):
    reach = find_reach(made, {}, Build())
    form = Form(made)
    patch = build_patch(form)
    ranges = find_ranges(patch, form, reach)
    return form, patch, ranges, find_sensitivity(form, patch, ranges)


#: One figure each, made worse by a factor.
CHANGES = {
    "op amp bandwidth": lambda t, f: replace(t, op_amp=replace(t.op_amp, gain_bandwidth=t.op_amp.gain_bandwidth / f)),
    "op amp slew": lambda t, f: replace(t, op_amp=replace(t.op_amp, slew=t.op_amp.slew / f)),
    "op amp offset": lambda t, f: replace(t, op_amp=replace(t.op_amp, offset=t.op_amp.offset * f)),
    "op amp gain": lambda t, f: replace(t, op_amp=replace(t.op_amp, gain=t.op_amp.gain / f)),
    "bias": lambda t, f: replace(t, op_amp=replace(t.op_amp, bias=t.op_amp.bias * f), switch_leakage=0.0),
    "multiplier bandwidth": lambda t, f: replace(
        t, multiplier=replace(t.multiplier, bandwidth=t.multiplier.bandwidth / f)
    ),
    "smallest R": lambda t, f: replace(t, resistors=tuple(r for r in t.resistors if r >= t.resistors[0] * f)),
    "largest R": lambda t, f: replace(t, resistors=tuple(r for r in t.resistors if r <= t.resistors[-1] / f)),
    "smallest C": lambda t, f: replace(t, capacitors=tuple(c for c in t.capacitors if c >= t.capacitors[0] * f)),
    "largest C": lambda t, f: replace(t, capacitors=tuple(c for c in t.capacitors if c <= t.capacitors[-1] / f)),
}


def moved(stages, target: Target, factor: float) -> tuple[Speed, dict[str, tuple[bool, bool]]]:
    """The window, and for each figure whether its fast and its slow end move when that figure gets a little worse."""
    before = choose_speed(*stages, target)
    moves = {}
    for figure, change in CHANGES.items():
        after = choose_speed(*stages, change(target, factor))
        moves[figure] = tuple(abs(a / b - 1) > 1e-9 for a, b in zip(after.window, before.window, strict=True))
    return before, moves


def test_values_set_both_ends_of_a_decay(stages, target):
    amp = target.op_amp
    ideal = replace(target, op_amp=replace(amp, gain_bandwidth=100 * amp.gain_bandwidth, gain=1e12, offset=0.0))
    speed, moves = moved(stages, ideal, 1.1)
    assert "smallest resistor times smallest capacitor" in speed.limits[0]
    assert "largest network of three resistors times largest capacitor" in speed.limits[1]
    assert {f for f, (fast, _) in moves.items() if fast} == {"smallest R", "smallest C"}
    # The longest network has the smallest resistor to ground.
    assert {f for f, (_, slow) in moves.items() if slow} == {"largest R", "largest C", "smallest R"}


def test_offsets_through_networks_set_the_slow_end_of_a_decay(stages, target):
    """x' = -x, one input: a network at R, C largest adds (1/R_max - 1/R) * Vos / C to x' (Conant, Analog Dialogue).

    The response to a constant rate is 1 - exp(-t), and END_ERROR of the peak of 1 is reached.
    """
    speed, moves = moved(stages, target, 1.1)
    assert speed.limits[1] == "offsets of TL07x through networks of three resistors, at 1 % of peak"
    assert {f for f, (_, slow) in moves.items() if slow} == {"op amp offset", "largest R", "largest C"}
    scale = middle_scales(*stages[:3], target)[stages[1].watched["x"]]
    largest = target.resistors[-1] * target.capacitors[-1]
    into = target.resistors[-1] + FIRST  # the shunt is far below the first resistor
    time = 0.01 / (1 - np.exp(-5)) * scale / target.op_amp.offset * largest
    assert speed.window[1] == pytest.approx(time * into / target.resistors[-1] + largest, rel=0.1)


@pytest.mark.parametrize("which", ["offset", "gain"])
def test_a_limit_is_where_its_figure_costs_one_percent(stages, target, which):
    """The rows hold what each figure allows: the error it makes there, by the sensitivities, is END_ERROR."""
    poor = replace(target, op_amp=replace(target.op_amp, gain=2e4))
    on = ground_of(*stages, poor)
    row = next(r for r in find_limits(on) if r.figure.endswith(which) and r.end == "slow")
    extra = network_conductance(on, np.array([row.time_scale]))[0, 0]
    name = stages[1].stages[-1].name
    response = np.abs(stages[3].leak[name] if which == "gain" else stages[3].rate[:, 0]).max()
    cost = extra / row.value if which == "gain" else extra * row.value / on.scales[stages[1].watched["x"]]
    assert cost * response == pytest.approx(END_ERROR, rel=1e-2)
    assert row.stage == name


def test_every_limit_has_its_numbers(stages, target):
    rows = choose_speed(*stages, target).rows
    assert {(r.end, r.figure) for r in rows} == {
        ("fast", "gain-bandwidth"), ("fast", "slew rate"), ("fast", "R × C"),
        ("slow", "R × C"), ("slow", "bias current"), ("slow", "offset"), ("slow", "open-loop gain"),
    }  # fmt: skip
    assert all(r.value > 0 and r.time_scale > 0 and r.unit and r.part and r.stage for r in rows)
    values = {r.figure: r.value for r in rows}
    assert values["gain-bandwidth"] == pytest.approx(3e6)
    assert values["slew rate"] == pytest.approx(13e6)


def test_bandwidth_sets_the_fast_end_of_an_oscillator(target):
    made = system({"x": 1, "y": 0}, {"x": [term(1, "y")], "y": [term(-1, "x")]}, duration=60)
    speed, moves = moved(parts_of(made), target, 1.6)
    assert speed.limits[0].startswith("bandwidth of TL07x")
    assert {f for f, (fast, _) in moves.items() if fast} == {"op amp bandwidth"}


def test_multiplier_bandwidth_sets_the_fast_end_of_a_slow_multiplier(target):
    slow = replace(target, multiplier=replace(target.multiplier, bandwidth=target.multiplier.bandwidth / 100))
    speed, moves = moved(parts_of(van_der_pol()), slow, 1.6)
    assert speed.limits[0].startswith("bandwidth of AD633")
    assert {f for f, (fast, _) in moves.items() if fast} == {"multiplier bandwidth"}


def test_slew_sets_the_fast_end_of_a_slow_op_amp(stages, target):
    lame = replace(target, op_amp=replace(target.op_amp, slew=target.op_amp.slew / 1e4))
    speed, moves = moved(stages, lame, 1.6)
    assert speed.limits[0].startswith("slew rate of TL07x")
    assert {f for f, (fast, _) in moves.items() if fast} == {"op amp slew"}


def test_bias_sets_the_slow_end_where_it_is_large(target):
    made = system({"x": 1, "y": 0}, {"x": [term(1, "y")], "y": [term(-1, "x")]}, duration=60)
    leaky = replace(target, op_amp=replace(target.op_amp, bias=1e-6), switch_leakage=0.0)
    speed, moves = moved(parts_of(made), leaky, 1.6)
    assert speed.limits[1].startswith("bias current of TL07x")
    # The error is bias over the largest capacitor: the sentence names the current, the capacitor is its partner.
    assert {f for f, (_, slow) in moves.items() if slow} == {"bias", "largest C"}


def test_a_given_speed_is_taken_even_outside_the_window(stages, target):
    assert choose_speed(*stages, target, given=3600.0).chosen == 3600.0


def test_a_state_that_never_moves_still_gets_a_speed(target):
    speed = choose_speed(*parts_of(system({"x": 1}, {"x": []})), target)
    assert 0 < speed.window[0] <= speed.chosen <= speed.window[1]
