"""Sensitivities against closed forms, and against solving the changed equations again."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from patchplan import sensitivity
from patchplan.equation.problem import Build
from patchplan.equation.syntax import parse_expression
from patchplan.equation.system import Source
from patchplan.equation.waveform import Waveform
from patchplan.form.offsets import shifted
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.ranges import find_ranges
from patchplan.reach.inputs import Inputs
from patchplan.reach.reference import find_reach
from patchplan.sensitivity import find_sensitivity
from tests.systems import lorenz, system, term, van_der_pol


def sensitivity_of(made, shifts=None):
    reach = find_reach(made, {}, Build())
    form = Form(shifted(made, shifts or {}), shifts or {})
    patch = build_patch(form)
    return patch, find_sensitivity(form, patch, find_ranges(patch, form, reach))


class Changed:
    """The patch with one coefficient, added rate, lag or start value changed; each change is (where, how much).

    A lag is put in as a first-order one, which has the same effect to first order in the lag once it has settled.
    """

    def __init__(self, patch, made, coefficient=None, rate=None, lag=None, start=None):
        self.patch, self.inputs = patch, Inputs(made)
        self.sources = [s.name for s in made.sources]
        self.integrators = [s for s in patch.stages if s.kind == "integrator"]
        self.coefficient, self.rate, self.start = coefficient, rate, start
        self.late = next((s for s in patch.stages if lag and s.name == lag[0]), None)
        self.lag = lag[1] if lag else 0.0

    def total(self, stage, values):
        """Input sum, or product, with what is added to it."""
        added = self.rate[1] if self.rate and self.rate[0] == stage.name else 0.0
        gains = [
            float(w.coefficient)
            * (1 + (self.coefficient[1] if self.coefficient and self.coefficient[0] == (stage.name, i) else 0))
            for i, w in enumerate(stage.wires)
        ]
        signals = [values[w.source] for w in stage.wires]
        if stage.kind == "multiplier":
            return gains[0] * signals[0] * signals[1] + added
        return sum(g * x for g, x in zip(gains, signals, strict=True)) + added

    def nodes(self, t, x):
        values = {s.node: x[i] for i, s in enumerate(self.integrators)}
        for stage in self.patch.stages:
            if stage.kind == "reference":
                values[stage.node] = 1.0
            elif stage.kind == "source":
                values[stage.node] = self.inputs.at(t)[self.sources.index(stage.signal)]
            elif stage.kind != "integrator":
                values[stage.node] = x[-1] if stage is self.late else self.total(stage, values)
        return values

    def slopes(self, t, x):
        values = self.nodes(t, x)
        out = [x[-1] if s is self.late else self.total(s, values) for s in self.integrators]
        return [*out, (self.total(self.late, values) - x[-1]) / self.lag] if self.late else out

    def first(self):
        x = [float(s.start) for s in self.integrators]
        if self.start:
            x[[s.name for s in self.integrators].index(self.start[0])] += self.start[1]
        if self.late is None:
            return x
        # An integrator's input is off in hold; other stages have settled.
        settled = 0.0 if self.late.kind == "integrator" else self.total(self.late, self.nodes(0.0, [*x, 0.0]))
        return [*x, settled]


def simulate(patch, made, times, **change):
    """Watched nodes of the changed patch over times."""
    changed = Changed(patch, made, **change)
    edges, x, found = changed.inputs.edges, changed.first(), []
    tolerance = 1e-9 if changed.late else 1e-11
    for a, b in pairwise(edges.tolist()):
        here = times[(times >= a) & ((times < b) | (b == edges[-1]))]
        inside = a + 1e-9, b - 1e-9
        run = solve_ivp(changed.slopes, inside, x, "LSODA", rtol=tolerance, atol=1e-12, dense_output=True)
        states = run.sol(np.clip(here, *inside))
        found += [[changed.nodes(t, s)[n] for n in patch.watched.values()] for t, s in zip(here, states.T, strict=True)]
        x = run.y[:, -1]
    return np.array(found).T


def filter_with_step():
    """Second order, driven by a cosine and a step inside the run; one output that is a sum."""
    return system(
        {"x": 1, "v": 0},
        {"x": [term(1, "v")], "v": [term(-4, "x"), term("-1/2", "v"), term(3, "u"), term(1, "s")]},
        signals={"y": [term(2, "x"), term(1, "v")]},
        sources=[
            Source("u", Waveform(parse_expression("cos(3*t)"))),
            Source("s", Waveform(parse_expression("step(t - 2)"))),
        ],
        watch=["x", "y"],
        duration=6,
    )


MADE = {
    "van der Pol": lambda: replace(van_der_pol(), duration=Fraction(8)),
    "Lorenz": lambda: replace(lorenz(), duration=Fraction(1)),
    "filter": filter_with_step,
}


@pytest.mark.parametrize("name", MADE)
def test_against_solving_the_changed_patch(name):
    made = MADE[name]()
    patch, found = sensitivity_of(made)
    # Every seventh time is enough; a jump is left out, where both sides are right.
    keep = np.arange(1, len(found.times), 7)
    times = found.times[keep]
    keep, times = keep[np.abs(times - 2) > 1e-6], times[np.abs(times - 2) > 1e-6]
    step = 1e-5

    def central(**change):
        ((key, value),) = change.items()
        up, down = (simulate(patch, made, times, **{key: (value, s)}) for s in (step, -step))
        return (up - down) / (2 * step) / found.base[:, None]

    def close(ours, theirs):
        # Central differences of a run that is itself within 1e-10, and 5e-4 for our own steps.
        np.testing.assert_allclose(ours[:, keep], theirs, atol=5e-4 * max(1.0, np.abs(theirs).max()))

    for i, wire in enumerate(found.wires):
        close(found.coefficient[:, i], central(coefficient=wire))
    for i, stage in enumerate(found.stages):
        close(found.rate[:, i], central(rate=stage))
    for stage in found.start:
        close(found.start[stage], central(start=stage))


@pytest.mark.parametrize("name", MADE)
def test_lag_against_a_first_order_lag(name):
    made = MADE[name]()
    patch, found = sensitivity_of(made)
    keep = np.flatnonzero((found.times > 0.2) & (np.abs(found.times - 2.1) > 0.1))[::7]
    plain = simulate(patch, made, found.times[keep])
    lag = 1e-5
    for i, stage in enumerate(found.stages):
        late = simulate(patch, made, found.times[keep], lag=(stage, lag))
        theirs = (late - plain) / lag / found.base[:, None]
        # The lag's own second order is about lag * (fastest rate)^2 of the response.
        np.testing.assert_allclose(found.lag[:, i, keep], theirs, atol=5e-3 * max(1.0, np.abs(theirs).max()))


def test_decay_in_closed_form():
    # x = exp(-a t): dx / d log a = -a t exp(-a t), per added rate (1 - exp(-a t)) / a, late input: x' + a t x' ...
    made = system({"x": 1}, {"x": [term(-2, "x")]}, duration=3)
    _, found = sensitivity_of(made)
    t = found.times
    decay = np.exp(-2 * t)
    assert found.wires == (("I1", 0),)
    np.testing.assert_allclose(found.coefficient[0, 0], -2 * t * decay, atol=1e-7)
    np.testing.assert_allclose(found.rate[0, 0], (1 - decay) / 2, atol=1e-7)
    np.testing.assert_allclose(found.start["I1"][0], decay, atol=1e-7)
    # A lag T of the input: T x'' + x' + 2 x = 0 from (1, 0) moves x by T (2 - 4 t) exp(-2 t) after its transient.
    # Slopes are taken as linear between the rows of the Reference, which is good to 1e-4 of their peak.
    np.testing.assert_allclose(found.lag[0, 0], (2 - 4 * t) * decay, atol=1e-4)
    assert len(t) <= sensitivity.TIMES


def test_base_is_half_the_swing_under_an_offset():
    made = system({"x": 5}, {"x": [term(4), term(-1, "x")]})
    assert sensitivity_of(made)[1].base[0] == pytest.approx(5.0)
    assert sensitivity_of(made, {"x": Fraction(4)})[1].base[0] == pytest.approx(0.5, rel=1e-6)


def test_adjoints_give_what_the_forward_method_gives(monkeypatch):
    n = 12
    names = [f"T{i}" for i in range(n)]
    rows = {m: [term(-2, m)] for m in names}
    for i, m in enumerate(names):
        rows[m] += [term(1, names[i + 1])] if i + 1 < n else []
        rows[m] += [term(1, names[i - 1])] if i else [term(1, "u")]
    source = Source("u", Waveform(parse_expression("1 + sin(t/3)")))
    made = system(
        dict.fromkeys(names, 0),
        rows,
        signals={"d": [term(1, "T3"), term(-1, "T2")]},
        sources=[source],
        watch=["T5", "d"],
        duration=40,
    )
    _, forward = sensitivity_of(made)
    monkeypatch.setattr(sensitivity, "FORWARD_LIMIT", 5)
    # Cells far below the fastest time constant (1/4), so that the comparison can interpolate between them.
    monkeypatch.setattr(sensitivity, "TIMES", 4001)
    _, adjoint = sensitivity_of(made)
    assert len(adjoint.times) == sensitivity.TIMES
    assert forward.wires == adjoint.wires

    def close(a, b):
        there = np.array([np.interp(forward.times, adjoint.times, row) for row in a.reshape(-1, a.shape[-1])])
        expected = b.reshape(-1, b.shape[-1])
        # Means over 4000 cells against 5th-order steps; rows are compared on the scale of the largest.
        np.testing.assert_allclose(there, expected, atol=2e-3 * np.abs(expected).max())

    close(adjoint.coefficient, forward.coefficient)
    close(adjoint.rate, forward.rate)
    close(adjoint.lag, forward.lag)
    for stage, start in forward.start.items():
        close(adjoint.start[stage], start)


def test_chaos_stays_finite():
    _, found = sensitivity_of(lorenz())
    assert np.isfinite(found.coefficient).all()
    # The run spirals out of a fixed point for some 13 s before it turns irregular, so growth is not yet e^(0.9 t).
    assert np.abs(found.coefficient[0, :, -1]).max() > 100
