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


def simulate(patch, made, times, *, coefficient=None, rate=None, lag=None, start=None):
    """Watched nodes of the patch over times, with one coefficient, added rate, lag or start value changed.

    A lag is put in as a first-order one, which has the same effect to first order in the lag once it has settled.
    """
    inputs = Inputs(made)
    integrators = [s for s in patch.stages if s.kind == "integrator"]
    place = {s.node: i for i, s in enumerate(integrators)}
    changed = {coefficient[0]: coefficient[1]} if coefficient else {}
    late = lag[0] if lag else None

    def nodes(t, x):
        values = {}
        for s in patch.stages:
            if s.kind == "reference":
                values[s.node] = 1.0
            elif s.kind == "source":
                values[s.node] = inputs.at(t)[[u.name for u in made.sources].index(s.signal)]
            elif s.kind == "integrator":
                values[s.node] = x[place[s.node]]
            else:
                values[s.node] = output(s, values, x)
        return values

    def total(s, values):
        return sum(
            float(w.coefficient) * (1 + changed.get((s.name, i), 0.0)) * values[w.source] for i, w in enumerate(s.wires)
        )

    def output(s, values, x):
        if s.name == late:
            return x[-1]
        if s.kind == "multiplier":
            product = values[s.wires[0].source] * values[s.wires[1].source] * (1 + changed.get((s.name, 0), 0.0))
        else:
            product = total(s, values)
        return product + (rate[1] if rate and rate[0] == s.name else 0.0)

    def slopes(t, x):
        values = nodes(t, x)
        out = []
        for s in integrators:
            slope = total(s, values) + (rate[1] if rate and rate[0] == s.name else 0.0)
            out.append(x[-1] if s.name == late else slope)
        if late:
            stage = next(s for s in patch.stages if s.name == late)
            wanted = (
                total(stage, values)
                if stage.kind != "multiplier"
                else values[stage.wires[0].source] * values[stage.wires[1].source]
            )
            out.append((wanted - x[-1]) / lag[1])
        return out

    x0 = [float(s.start) + (start[1] if start and start[0] == s.name else 0.0) for s in integrators]
    if late:
        stage = next(s for s in patch.stages if s.name == late)
        values = nodes(0.0, [*x0, 0.0])
        first = 0.0
        if stage.kind == "multiplier":
            first = values[stage.wires[0].source] * values[stage.wires[1].source]
        elif stage.kind != "integrator":
            first = total(stage, values)
        x0.append(first)
    edges = inputs.edges
    found, x = [], x0
    for a, b in pairwise(edges.tolist()):
        here = times[(times >= a) & ((times < b) | (b == edges[-1]))]
        run = solve_ivp(
            slopes, (a + 1e-9, b - 1e-9), x, "LSODA", rtol=1e-9 if late else 1e-11, atol=1e-12, dense_output=True
        )
        states = run.sol(np.clip(here, a + 1e-9, b - 1e-9))
        found += [[nodes(t, s)[n] for n in patch.watched.values()] for t, s in zip(here, states.T, strict=True)]
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
