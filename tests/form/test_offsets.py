"""Changes of variables keep the equations: the shifted system moves exactly as the old one."""

from __future__ import annotations

from fractions import Fraction
from math import prod

import numpy as np

from patchplan.equation.problem import Terminal
from patchplan.form.offsets import find_form, shifted
from patchplan.reach.records import Range, Reach, Reference
from tests.systems import system, term, van_der_pol


def reach_with(**ranges: tuple[float, float]) -> Reach:
    nothing = Reference((), np.zeros(0), np.zeros((0, 0)), np.zeros((0, 0)))
    return Reach(nothing, {n: Range(n, low, high, "simulated") for n, (low, high) in ranges.items()}, ())


def value(row, point):
    return sum(t.coefficient * prod(point[n] ** p for n, p in t.factors) for t in row.terms)


def test_shifted_rates_are_the_old_rates_at_the_shifted_point():
    before = van_der_pol()
    shift = {"y": Fraction(3, 2), "y'": Fraction(-1, 4)}
    after = shifted(before, shift)
    point = {"y": Fraction(7, 3), "y'": Fraction(5, 8)}
    moved = {n: v - shift[n] for n, v in point.items()}
    assert [value(r, point) for r in before.rows] == [value(r, moved) for r in after.rows]
    assert [s.start + shift[s.name] for s in after.states] == [s.start for s in before.states]


def oven():
    """T' = -(T - 20)/50 + 1.2: an oven near 80 degrees, invented."""
    return system({"T": 78}, {"T": [term("-1/50", "T"), term("20/50"), term("12/10")]})


def test_offset_pays_where_the_swing_is_far_from_zero():
    form = find_form(oven(), reach_with(T=(78.0, 80.0)))
    assert form.offsets["T"] == 79
    assert form.system.states[0].start == -1
    assert len(form.notes) == 1


def test_no_offset_where_the_signal_swings_around_zero_or_is_multiplied():
    assert not find_form(oven(), reach_with(T=(-80.0, 80.0))).offsets
    assert not find_form(van_der_pol(), reach_with(y=(7.0, 8.0))).offsets
    assert not find_form(oven(), reach_with(T=(78.0, 80.0)), offsets=False).offsets


def test_terminal_of_a_state_gets_its_own_stage_and_offset():
    form = find_form(oven(), reach_with(T=(0.0, 100.0)), {"T": Terminal(Fraction(1, 20), Fraction(5, 2))})
    out = form.system.signals[-1]
    assert out.name == "T.out"
    assert form.scales["T.out"] == Fraction(1, 20)
    assert form.offsets["T.out"] == -50
    # v = 1/20 * (T + 50) = T/20 + 2.5
    assert value(out, {"T": Fraction(30)}) == 80
