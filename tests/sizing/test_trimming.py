"""Trimmers: the fewest, and boards drawn at random that are trimmed by the stated rule in the simulation."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest

from patchplan.check.figures import error_base, signal_of
from patchplan.check.simulate import simulate
from patchplan.circuit.records import Circuit
from patchplan.circuit.trimmers import TRIMMER, fit_trim
from patchplan.equation.reader import read_problem
from patchplan.pipeline import plan
from patchplan.report.records import Plan
from patchplan.report.trimming import trimmer_ref, trimming_data
from patchplan.sizing.readings import moves_for, smallest_set, spread_at
from patchplan.sizing.trim_records import Trimmer
from patchplan.sizing.trimming import _figure

OSCILLATOR = """equations = ["x'' = -x"]
duration = 25.2
watch = ["x"]
[start]
x = 1.0
"x'" = 0.0
"""
STEP = """equations = ["x'' = -25*x - 2*x' + 25*u"]
duration = 3
watch = ["x"]
[start]
x = 0.0
"x'" = 0.0
[inputs]
u = "step(t)"
"""


def planned(folder: Path, problem: str, *, trim: bool, accept: float) -> Plan:
    path = folder / "p.toml"
    path.write_text(f"{problem}[build]\ntrim = {'true' if trim else 'false'}\n", encoding="utf-8")
    return plan(read_problem(path), think="low", accept=accept)


def drawn(circuit: Circuit, seed: int) -> Circuit:
    """One board of many: every resistor, capacitor and track somewhere inside its tolerance."""
    random = np.random.default_rng(seed)
    parts = []
    for part in circuit.parts:
        off = 1 + part.tolerance * random.uniform(-1, 1)
        if part.kind in ("resistor", "capacitor"):
            part = replace(part, value=part.value * off)
        elif part.kind == "potentiometer":
            part = replace(part, total=part.total * off)
        parts.append(part)
    return replace(circuit, parts=tuple(parts))


def error_percent(made: Plan, circuit: Circuit) -> float:
    reference = made.reach.reference
    traces = simulate(circuit, times=reference.times * circuit.time_scale, waveforms=reference.waveforms)
    off = (signal_of(circuit, traces, net) - reference.of(name) for name, net in circuit.watched.items())
    bases = (error_base(circuit, reference, name) for name in circuit.watched)
    return max(100 * float(np.abs(o).max()) / base for o, base in zip(off, bases, strict=True))


def turned(circuit: Circuit, ref: str, setting: float) -> Circuit:
    parts = tuple(replace(p, value=float(np.clip(setting, 0.0, 1.0))) if p.ref == ref else p for p in circuit.parts)
    return replace(circuit, parts=parts)


def reading(made: Plan, circuit: Circuit, trimmer: Trimmer) -> float:
    """The watched signal at the stated time, less what it should be."""
    times = np.linspace(0.0, max(trimmer.time, 1e-9), 50)
    traces = simulate(circuit, times=times * circuit.time_scale, waveforms=made.reach.reference.waveforms)
    return float(signal_of(circuit, traces, circuit.watched[trimmer.watch])[-1]) - trimmer.value


def trimmed(made: Plan, circuit: Circuit) -> Circuit:
    """Each trimmer turned, in the stated order and so many rounds, until its reading stands (secant rule)."""
    assert made.sizing.trimming is not None
    for _ in range(made.sizing.trimming.rounds):
        for trimmer in made.sizing.trimming.trimmers:
            ref = trimmer_ref(made, trimmer)
            before = next(p.value for p in circuit.parts if p.ref == ref)
            now, off = before + 0.02, reading(made, circuit, trimmer)
            for _ in range(3):
                circuit = turned(circuit, ref, now)
                off_now = reading(made, circuit, trimmer)
                if off_now == off:
                    break
                before, now, off = now, now - off_now * (now - before) / (off_now - off), off_now
            circuit = turned(circuit, ref, now)
    return circuit


@pytest.mark.parametrize(("problem", "accept"), [(OSCILLATOR, 1.0), (STEP, 0.3)], ids=["oscillator", "step"])
def test_the_stated_rule_takes_up_what_tolerances_do(tmp_path, problem, accept):
    plain = planned(tmp_path, problem, trim=False, accept=accept)
    made = planned(tmp_path, problem, trim=True, accept=accept)
    trimming, suggested = made.sizing.trimming, plain.sizing.trimming
    assert trimming.fitted
    assert not suggested.fitted
    assert 0 < len(trimming.trimmers) <= trimming.loops
    assert trimming.least <= len(trimming.trimmers)
    assert made.verdict.verdict == "follows"
    spread = 100 * suggested.before
    assert plain.verdict.spread_percent > 0.9 * spread
    assert made.verdict.spread_percent < 0.35 * spread
    untrimmed, after = [], []
    for seed in (1, 2):
        untrimmed.append(error_percent(plain, drawn(plain.circuit, seed)))
        after.append(error_percent(made, trimmed(made, drawn(made.circuit, seed))))
    assert max(after) < 0.25 * spread
    assert max(after) < 0.3 * max(untrimmed)


def test_no_trimmer_runs_out_of_track(tmp_path):
    """Corners: all parts at the ends of their tolerances, in the combinations that move each reading most."""
    made = planned(tmp_path, OSCILLATOR, trim=True, accept=1.0)
    for seed in (1, 2, 3):
        ends = np.random.default_rng(seed)
        parts = tuple(
            replace(p, value=p.value * (1 + p.tolerance * ends.choice([-1, 1])))
            if p.kind in ("resistor", "capacitor") else p
            for p in made.circuit.parts
        )  # fmt: skip
        board = trimmed(made, replace(made.circuit, parts=parts))
        assert all(0.01 < p.value < 0.99 for p in board.parts if p.model == TRIMMER)


def test_what_is_fitted_is_told(tmp_path):
    made = planned(tmp_path, OSCILLATOR, trim=True, accept=1.0)
    told = trimming_data(made)
    fitted = [p for p in made.circuit.parts if p.model == TRIMMER]
    assert sorted(row["ref"] for row in told["trimmers"]) == sorted(p.ref for p in fitted)
    for row in told["trimmers"]:
        part = next(p for p in fitted if p.ref == row["ref"])
        assert (part.total, part.value) == pytest.approx((row["track"], row["setting"]))
        assert row["fixed"] + row["setting"] * row["track"] == pytest.approx(row["ohms"])


def test_the_curve_knows_of_the_trimmers(tmp_path):
    made = planned(tmp_path, OSCILLATOR, trim=True, accept=1.0)
    assert made.speed_curve is not None
    assert made.sizing.trimming is not None
    assert made.verdict.spread_percent < made.sizing.trimming.before * 100 / 3
    assert made.speed_curve.chosen[1] == pytest.approx(made.verdict.spread_percent, rel=0.1)


def test_little_spread_needs_no_trimmers(tmp_path):
    made = planned(tmp_path, STEP, trim=True, accept=50.0)
    assert made.sizing.trimming.trimmers == ()
    assert made.sizing.trimming.after == made.sizing.trimming.before
    assert all(p.model != TRIMMER for p in made.circuit.parts)


@pytest.mark.parametrize("seed", range(6))
def test_no_smaller_set_does(seed):
    """Against all sets there are; the proved bound holds for them."""
    random = np.random.default_rng(seed)
    basis = random.normal(size=(60, 4)) * np.array([1.0, 0.7, 0.3, 0.05])
    responses, columns = basis @ random.normal(size=(4, 7)), basis @ random.normal(size=(4, 12))
    allowed = 0.2 * spread_at(columns)
    chosen, least = smallest_set(responses, columns, allowed, 4)

    def left(places):
        part = responses[:, list(places)]
        return spread_at(columns - part @ np.linalg.lstsq(part, columns, rcond=None)[0])

    fewest = next(k for k in range(1, 8) if any(left(s) <= allowed for s in combinations(range(7), k)))
    assert len(chosen) == fewest
    assert least <= fewest
    assert left(chosen) <= allowed


def test_readings_stand_after_the_moves():
    random = np.random.default_rng(4)
    responses, columns = random.normal(size=(30, 3)), random.normal(size=(30, 5))
    rest = columns - responses @ moves_for(responses, columns, [3, 11, 27])
    assert np.abs(rest[[3, 11, 27]]).max() < 1e-12


def test_a_track_covers_the_reach_at_the_ends_of_tolerances():
    trimmer = Trimmer("I1", 0, 47e3, 0.08, "x", 1.0, 0.5, "value", 0.1)
    trim = fit_trim(trimmer, (10e3, 22e3, 39e3, 43e3, 47e3), 0.01)
    assert trim.fixed * 1.01 <= 47e3 * 0.92
    assert trim.fixed * 0.99 + trim.track * 0.8 >= 47e3 * 1.08
    assert trim.fixed + trim.setting * trim.track == pytest.approx(47e3)


def test_a_moment_at_which_nothing_shows_serves_no_setting():
    """Before a step both watched responses are 0: no order of setting comes to rest there."""
    from patchplan.sizing.readings import _radius

    assert _radius(np.zeros((2, 2))) == np.inf
    assert _radius(np.array([[1.0, 0.5], [0.0, 1.0]])) == 0.0


def test_only_a_signal_near_zero_crosses_it():
    wave = np.cos(np.linspace(0.0, 10.0, 1001))
    assert _figure(wave, int(np.argmin(np.abs(wave[:300])))) == "zero crossing"
    assert _figure(wave, int(np.argmin(np.abs(wave[:300] - 0.05)))) == "value"
