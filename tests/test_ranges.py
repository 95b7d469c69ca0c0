"""Ranges of nodes: signals, products, sums and offsets against the curves they come from."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from patchplan.equation.problem import Build, Parameter
from patchplan.equation.syntax import parse_expression
from patchplan.equation.system import Source
from patchplan.equation.waveform import Waveform
from patchplan.form.offsets import shifted
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.records import Patch, Stage, Wire
from patchplan.ranges import find_ranges
from patchplan.reach.reference import find_reach
from tests.systems import knob, lorenz, system, term, van_der_pol


def ranges_of(made, shifts=None, stated=None):
    reach = find_reach(made, stated or {}, Build())
    form = Form(shifted(made, shifts or {}), shifts or {})
    patch = build_patch(form)
    return patch, reach, find_ranges(patch, form, reach)


def node_of(patch, signal):
    return next(s.node for s in patch.stages if s.signal == signal)


@pytest.mark.parametrize("made", [van_der_pol(), lorenz()], ids=["van der Pol", "Lorenz"])
def test_every_node_holds_its_run(made):
    patch, reach, ranges = ranges_of(made)
    assert set(ranges.nodes) == {s.node for s in patch.stages}
    for node, values in ranges.values.items():
        found = ranges.nodes[node]
        assert found.low <= values.min() and values.max() <= found.high  # noqa: PT018
        assert np.abs(ranges.rates[node]).max() <= found.rate * (1 + 1e-12)
    for state in made.states:
        assert ranges.nodes[node_of(patch, state.name)].high == reach.ranges[state.name].high


def test_products_and_their_slopes():
    patch, reach, ranges = ranges_of(lorenz())
    node, reference = node_of(patch, "x*y"), reach.reference
    x, y = reference.of("x"), reference.of("y")
    np.testing.assert_array_equal(ranges.values[node], x * y)
    np.testing.assert_allclose(ranges.rates[node], np.gradient(x * y, reference.times), atol=0.02 * np.ptp(x * y))
    grown = ranges.nodes[node].high / (x * y).max()
    widened = [reach.ranges[n].peak / np.abs(reference.of(n)).max() for n in ("x", "y")]
    assert grown == pytest.approx(widened[0] * widened[1], rel=1e-4)


def test_offset_shifts_the_range():
    made = system({"x": 5}, {"x": [term(4), term(-1, "x")]})
    patch, _, ranges = ranges_of(made, {"x": Fraction(4)})
    found = ranges.nodes[node_of(patch, "x")]
    assert (found.low, found.high) == pytest.approx((np.exp(-20.0), 1.0), abs=1e-8)
    assert found.known_by == "proved"
    assert ranges.values[node_of(patch, "x")][0] == 1.0


def test_a_jumping_source_is_infinitely_fast_and_its_integral_is_not():
    made = system(
        {"x": 0}, {"x": [term(-1, "x"), term(2, "u")]}, sources=[Source("u", Waveform(parse_expression("step(t - 1)")))]
    )
    patch, _, ranges = ranges_of(made)
    assert ranges.nodes[node_of(patch, "u")].rate == np.inf
    assert ranges.nodes[node_of(patch, "x")].rate == pytest.approx(2.0, rel=1e-9)


def test_a_stated_range_is_taken_as_it_stands():
    patch, _, ranges = ranges_of(van_der_pol(), stated={"y": (Fraction(-3), Fraction(3))})
    found = ranges.nodes[node_of(patch, "y")]
    assert (found.low, found.high, found.known_by) == (-3.0, 3.0, "stated")


def test_a_patch_sum_under_a_free_input_has_a_peak_gain_of_its_own():
    made = system(
        {"x": 0, "y": 0},
        {"x": [term(-1, "x"), term(1, "u")], "y": [term(-1, "y"), term(1, "u")]},
        sources=[Source("u", None, (Fraction(-1), Fraction(2)))],
    )
    reach = find_reach(made, {}, Build())
    wires = Wire("x", Fraction(1)), Wire("y", Fraction(-3))
    stages = (
        Stage("V1", "source", "u", "u", 1),
        Stage("I1", "integrator", "x", "x", -1, (Wire("x", Fraction(-1)), Wire("u", Fraction(1)))),
        Stage("I2", "integrator", "y", "y", -1, (Wire("y", Fraction(-1)), Wire("u", Fraction(1)))),
        Stage("S1", "summer", "d", "part of d", 1, wires),
    )
    patch = Patch(stages, {"x": "x"}, {"u": made.sources[0]}, {})
    found = find_ranges(patch, Form(made), reach).nodes["d"]
    # x and y are one and the same, within -1 ... 2 (low-pass of gain 1, never negative), so that x - 3 y = -2 x. It is
    # steepest where u jumps from one end to the other: 2 (2 + 1).
    assert (found.low, found.high) == pytest.approx((-4.0, 2.0), rel=1e-7)
    assert found.known_by == "proved"
    assert found.rate == pytest.approx(6.0, rel=1e-7)


def test_a_knob_stage_holds_the_nominal_run():
    made = system(
        {"x": 1, "v": 0},
        {"x": [term(1, "v")], "v": [term(-1, "x"), term(-1, "v", knobs=["c"])]},
        knobs=[knob("c", 0.5, 2, 3)],
    )
    patch, reach, ranges = ranges_of(made)
    stage = next(s for s in patch.stages if s.knob == "c")
    np.testing.assert_allclose(ranges.values[stage.node], 2 * reach.reference.of("v"), rtol=1e-12)


def test_a_knob_with_no_way_back_and_its_signal_are_largest_together():
    signals = {"y": [term(1, "x", knobs=["c"]), term(1, "v")]}
    rates = {"x": [term(1, "v")], "v": [term(-1, "x", knobs=["k"]), term("-1/5", "v")]}
    knobs = [knob("k", 1, 2, 3), knob("c", 1, 2, 3)]
    made = system({"x": 0, "v": 1}, rates, signals=signals, knobs=knobs, watch=["y"])
    box = tuple(Parameter(name, Fraction(2), Fraction(1), Fraction(3)) for name in ("k", "c"))
    patch, _, ranges = ranges_of(replace(made, adjustable=box))
    by_knob = {stage.knob: ranges.nodes[stage.node] for stage in patch.stages if stage.knob}
    x = ranges.nodes[node_of(patch, "x")]
    assert (by_knob["c"].low, by_knob["c"].high) == pytest.approx((3 * x.low, 3 * x.high), rel=1e-12)
    # k closes a loop: where it is largest, x is small.
    assert by_knob["k"].high < 0.8 * 3 * x.high
