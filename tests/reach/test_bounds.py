"""Worst cases under bounded inputs: published peak gains, and attack by the worst waveform itself."""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from scipy import signal

from patchplan.equation.problem import Build
from patchplan.equation.system import Source
from patchplan.reach.reference import find_reach
from tests.systems import system, term

FORMULAS = json.loads((Path(__file__).parents[1] / "cases" / "formulas.json").read_text(encoding="utf-8"))["formulas"]
EXAMPLE = {f["id"]: f["example"] for f in FORMULAS}


def low_pass(gain, polynomial, duration, bounds=(-1, 1)):
    """gain / polynomial(s) driven by an input within bounds, y brought out."""
    leading, *rest = polynomial
    n = len(rest)
    names = ["x" + "'" * k for k in range(n)]
    rows = {names[k]: [term(1, names[k + 1])] for k in range(n - 1)}
    feedback = [term(Fraction(-c / leading), name) for c, name in zip(reversed(rest), names, strict=True)]
    rows[names[-1]] = [*feedback, term(Fraction(gain / leading), "u")]
    source = Source("u", None, (Fraction(bounds[0]), Fraction(bounds[1])))
    made = system(
        dict.fromkeys(names, 0), rows, signals={"y": [term(1, "x")]}, sources=[source], watch=["y"], duration=duration
    )
    return find_reach(made, {}, Build())


@pytest.mark.parametrize("zeta", range(6))
def test_second_order_peak_gains(zeta):
    # Boyd & Barratt 1991, chapter 5: closed form in the row's lowpass_L1_formula.
    row = EXAMPLE["peak_gain_L1"]["rows"][zeta]
    found = low_pass(1.0, [1.0, 2 * row["zeta"], 1.0], 60 / row["zeta"] ** 0.5 if row["zeta"] > 0.1 else 260).ranges[
        "y"
    ]
    assert found.known_by == "proved"
    # A proof may stand above the limit by its slack; the run is long enough to reach all but 1e-5 of it.
    assert -1e-5 < found.high / row["lowpass_L1_formula"] - 1 < 1e-4
    assert found.low == pytest.approx(-found.high, rel=1e-12)


@pytest.mark.parametrize("name", ["butterworth_3", "butterworth_6", "chebyshev_1dB_3", "bessel_delay1_5"])
def test_filter_peak_gains(name):
    # cases/formulas.json "filter_peak_gains": numerical integral of |h| from partial fractions.
    kind, order = name.split("_")[0], int(name[-1])
    b, a = {
        "butterworth": lambda: signal.butter(order, 1, analog=True),
        "chebyshev": lambda: signal.cheby1(order, 1, 1, analog=True),
        "bessel": lambda: signal.bessel(order, 1, analog=True, norm="delay"),
    }[kind]()
    reach = low_pass(float(b[-1]), [float(x) for x in a], 120)
    expected = EXAMPLE["filter_peak_gains"][name]["L1"]
    # The published figure has 7 digits.
    assert reach.ranges["y"].high == pytest.approx(expected, rel=5e-6)
    # The stand-in waveform reaches what the proof allows, and none of its runs exceeds it.
    reached = np.abs(reach.reference.of("y")).max()
    assert 0.9999 * expected < reached <= reach.ranges["y"].high
    assert set(np.unique(reach.reference.of("u"))) == {-1.0, 1.0}


def test_any_waveform_stays_inside_the_proof():
    reach = low_pass(1.0, [1.0, 0.2, 1.0], 30, bounds=(-1, 3))
    random = np.random.default_rng(1)
    levels = random.choice((-1.0, 3.0), 60)
    t = np.linspace(0, 30, 6001)
    plant = signal.StateSpace([[0, 1], [-1, -0.2]], [[0], [1]], [[1, 0]], [[0]])
    _, y, _ = signal.lsim(plant, np.repeat(levels, 101)[: t.size], t)
    found = reach.ranges["y"]
    assert found.low < y.min()
    assert y.max() < found.high
    # Middle 1 with half width 2: 1 + 2 * gain at most, gain below 6.386823 (closed form of zeta = 0.1).
    assert found.high < 1.73 + 2 * 6.386824


def bounded(name):
    return Source(name, None, (Fraction(0), Fraction(10)))


def test_every_input_is_driven_for_the_first_watched_signal_it_moves():
    rows = {"x": [term(-1, "x"), term(1, "u")], "y": [term(-2, "y"), term("-3/10", "u"), term(1, "w")]}
    rows["z"] = [term(-1, "z"), term(1, "v")]
    made = system(
        dict.fromkeys(rows, 0), rows, sources=[bounded("u"), bounded("v"), bounded("w")], watch=["x", "y"], duration=10
    )
    reach = find_reach(made, {}, Build())
    begin = "The input {} is known by its bounds only: the check "
    assert reach.warnings == (
        begin.format("u") + "drives it with the worst case for x, a constant 10.",
        begin.format("v") + "holds it at their middle, 5, as it moves no watched signal.",
        begin.format("w") + "drives it with the worst case for y, a constant 10.",
    )
    waveforms = {name: set(values) for name, (_, values) in reach.reference.waveforms.items()}
    assert waveforms == {"u": {10.0}, "v": {5.0}, "w": {10.0}}


def test_what_follows_an_input_at_once_is_driven_by_its_sign():
    signals = {"y": [term(-2, "u"), term(1, "x")]}
    made = system({"x": 1}, {"x": [term(-1, "x")]}, signals=signals, sources=[bounded("u")], watch=["y"], duration=5)
    # The middle run ends below zero, y = exp(-5) - 2 * 5, so that the worst is the lowest: u at its upper end.
    reach = find_reach(made, {}, Build())
    assert set(reach.reference.of("u")) == {10.0}
    assert reach.reference.of("y").min() == pytest.approx(reach.ranges["y"].low, rel=1e-3)


@pytest.mark.parametrize("cubic", [0, 1], ids=["linear", "nonlinear"])
def test_the_sentence_counts_the_jumps_of_the_waveform(cubic):
    rate = [term(-1, "x"), term("-1/5", "v"), term(-cubic, "x", "x", "x"), term(1, "u")]
    made = system({"x": 0, "v": 0}, {"x": [term(1, "v")], "v": rate}, sources=[bounded("u")], watch=["x"], duration=20)
    reach = find_reach(made, {}, Build())
    jumps = np.count_nonzero(np.diff(reach.reference.of("u")))
    # A resonance of half period pi is driven furthest by about as many jumps as half periods fit.
    assert jumps >= 4
    (said,) = [w for w in reach.warnings if "known by its bounds" in w]
    how = "the worst case for x that a search found" if cubic else "the worst case for x"
    assert f"drives it with {how}, {jumps} jumps between 0 and 10." in said
