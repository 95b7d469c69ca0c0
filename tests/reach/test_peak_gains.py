"""Peak gains over the run against closed forms, python-control and scipy, and the proofs behind them."""

from __future__ import annotations

from fractions import Fraction

import control
import numpy as np
import pytest
from scipy.integrate import quad, simpson
from scipy.linalg import expm
from scipy.sparse import csr_array

from patchplan.equation.problem import Build
from patchplan.equation.system import Source
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.ranges import find_ranges
from patchplan.reach.areas import areas
from patchplan.reach.bounds import bounded_of, ends_of, gains_of, name_rows
from patchplan.reach.field import field_of
from patchplan.reach.linear import solve_linear
from patchplan.reach.reference import find_reach
from patchplan.reach.truncation import missed
from tests.systems import system, term

FREE = Source("u", None, (Fraction(-1), Fraction(1)))


def second_order(zeta, duration, start=("0", "0"), source=FREE):
    """x'' + 2 zeta x' + x = u, with a sum, its own derivative and a sum that the input enters at once brought out."""
    rows = {"x": [term(1, "v")], "v": [term(-1, "x"), term(Fraction(-2) * Fraction(zeta), "v"), term(1, "u")]}
    signals = {
        "sum": [term(3, "x"), term(-2, "v")],
        "a": [term(-1, "x"), term(Fraction(-2) * Fraction(zeta), "v"), term(1, "u")],
    }
    starts = dict(zip("xv", start, strict=True))
    return system(starts, rows, signals=signals, sources=[source], watch=["x", "sum", "a"], duration=duration)


def matrices(zeta):
    a = np.array([[0.0, 1.0], [-1.0, -2.0 * float(zeta)]])
    rows = {"x": [1.0, 0.0], "v": [0.0, 1.0], "sum": [3.0, -2.0], "a": [-1.0, -2.0 * float(zeta)]}
    return a, np.array([0.0, 1.0]), {name: np.array(row) for name, row in rows.items()}


def step_and_impulse(zeta, t):
    """Closed forms of x'' + 2 zeta x' + x = u from rest: step response of x, impulse response, its slope."""
    z = float(zeta)
    if z < 1:
        w = np.sqrt(1 - z * z)
        e, s, c = np.exp(-z * t), np.sin(w * t), np.cos(w * t)
        return 1 - e * (c + z / w * s), e * s / w, e * (c - z / w * s)
    if z == 1:
        e = np.exp(-t)
        return 1 - e * (1 + t), t * e, e * (1 - t)
    r = np.sqrt(z * z - 1)
    p, q = z - r, z + r
    a, b = np.exp(-p * t), np.exp(-q * t)
    return 1 - (q * a - p * b) / (q - p), (a - b) / (q - p), (q * b - p * a) / (q - p)


def closed_form(zeta, duration, row):
    """Integral of |3 x - 2 v| and the like, by the closed step response between the zeros of the impulse response."""
    z = float(zeta)

    def response(t):
        _, h, dh = step_and_impulse(zeta, t)
        return row[0] * h + row[1] * dh

    def integral(t):
        step, h, _ = step_and_impulse(zeta, t)
        return row[0] * step + row[1] * h

    # Zeros of p sin(w t) + q cos(w t), of p + q t or of p e^(-a t) + q e^(-b t), from the values at 0.
    h0, d0 = response(0.0), row[0] * 1.0 + row[1] * (-2 * z)
    if z < 1:
        w = np.sqrt(1 - z * z)
        phase = np.arctan2(h0, (d0 + z * h0) / w)
        zeros = (np.pi * np.arange(-2, duration * w / np.pi + 3) - phase) / w
    elif z == 1:
        zeros = np.array([-h0 / (d0 + h0)])
    else:
        r = np.sqrt(z * z - 1)
        ratio = (d0 + (z + r) * h0) / (d0 + (z - r) * h0)
        zeros = np.log([ratio]) / (-2 * r) if ratio > 0 else np.zeros(0)
    inner = zeros[(zeros > 0) & (zeros < duration)]
    return float(np.abs(np.diff(integral(np.concatenate(([0.0], inner, [float(duration)]))))).sum())


@pytest.mark.parametrize("duration", [1, 7, 40])
@pytest.mark.parametrize("zeta", ["1/100", "3/10", "1", "5/2"])
def test_second_order_over_the_run_to_1e_6(zeta, duration):
    zeta = Fraction(zeta)
    ranges = find_reach(second_order(zeta, duration), {}, Build()).ranges
    for name, row in matrices(zeta)[2].items():
        exact = closed_form(zeta, duration, row) + (name == "a")
        assert ranges[name].known_by == "proved"
        assert 0 <= ranges[name].high / exact - 1 < 1e-6, name
        assert 0 <= -ranges[name].low / exact - 1 < 1e-6, name


@pytest.mark.parametrize(("zeta", "duration"), [("1/5", 30), ("5/2", 12)])
def test_python_control_agrees(zeta, duration):
    zeta = Fraction(zeta)
    a, b, rows = matrices(zeta)
    ranges = find_reach(second_order(zeta, duration), {}, Build()).ranges
    times = np.linspace(0, duration, 40001)
    for name in ("x", "sum"):
        plant = control.ss(a, b[:, None], rows[name][None], 0)
        h = control.impulse_response(plant, times).outputs
        # Simpson's rule loses about |h'| dt^2 at each change of sign: below 1e-6 of the area here.
        assert ranges[name].high == pytest.approx(simpson(np.abs(h), x=times), rel=1e-6), name


def test_every_node_of_a_patch_has_its_own_peak_gain():
    made = second_order(Fraction(1, 5), 15)
    form = Form(made)
    patch = build_patch(form)
    ranges = find_ranges(patch, form, find_reach(made, {}, Build()))
    a, b, rows = matrices(Fraction(1, 5))
    checked = 0
    for stage in patch.stages:
        row = rows.get(stage.signal)
        if row is None:
            continue
        area = quad(lambda t, row=row: abs(row @ expm(a * t) @ b), 0, 15, limit=400, epsabs=0, epsrel=1e-9)[0]
        found = ranges.nodes[stage.node]
        assert found.peak == pytest.approx(area + (stage.signal == "a"), rel=2e-7), stage.node
        if stage.signal in ("x", "v", "sum"):
            # Its slope is a sum as well: h' and what the input adds at once.
            slope = quad(lambda t, row=row: abs(row @ a @ expm(a * t) @ b), 0, 15, limit=400, epsabs=0, epsrel=1e-9)
            assert found.rate == pytest.approx(slope[0] + abs(row @ b), rel=2e-7), stage.node
        else:
            assert found.rate == np.inf
        checked += 1
    assert checked >= 4


def test_a_start_and_a_middle_that_move_are_met_where_they_meet_the_gain():
    # Start away from rest, bounds 0 ... 2: middle run plus gain, its highest point found by dense sampling.
    zeta, duration = Fraction(3, 10), 12
    source = Source("u", None, (Fraction(0), Fraction(2)))
    found = find_reach(second_order(zeta, duration, ("2", "-3"), source), {}, Build()).ranges
    a, b, rows = matrices(zeta)
    times = np.linspace(0, duration, 120001)
    step = expm(a * (times[1] - times[0]))
    free, pushed = np.empty((2, times.size, 2))
    free[0], pushed[0] = [2.0, -3.0], b
    for k in range(1, times.size):
        free[k], pushed[k] = step @ free[k - 1], step @ pushed[k - 1]
    for name in ("x", "v", "sum"):
        row = rows[name]
        middle = free @ row + (pushed - b) @ np.linalg.inv(a).T @ row
        h = np.abs(pushed @ row)
        gain = np.concatenate(([0.0], np.cumsum((h[1:] + h[:-1]) / 2) * (times[1] - times[0])))
        assert found[name].high == pytest.approx((middle + gain).max(), rel=1e-6), name
        assert found[name].low == pytest.approx((middle - gain).min(), rel=1e-6), name


def test_areas_are_bracketed():
    # 6 Bernstein coefficients of s - 1/3: linear precision. Area: (1/9 + 4/9) / 2.
    line = np.arange(6)[None] / 5 - 1 / 3
    upper, lower = areas(line, np.ones(1), np.zeros(1, int))
    assert lower[0] <= 5 / 18 <= upper[0]
    assert upper[0] - lower[0] < 1e-9


@pytest.mark.parametrize("stable", [True, False], ids=["by comparison", "by impulses"])
def test_what_a_response_misses_is_bounded(stable):
    # A coarse solution, so that its error can be seen beside the bound.
    a = np.array([[-2.0, 1.0], [1.0, -3.0]]) if stable else np.array([[0.0, 1.0], [-9.0, -0.1]])
    pieces = solve_linear(csr_array(a), np.array([0.0, 1.0]), None, np.array([0.0, 8.0]), tolerance=1e-4)
    times = np.linspace(0, 8, 4001)
    exact = np.array([expm(a * t) @ [0.0, 1.0] for t in times]).T
    error = simpson(np.abs(pieces.at(times) - exact), x=times, axis=1)
    bound = missed(csr_array(a), pieces, 8.0)
    assert (error > 1e-9).all()
    assert (error < bound).all()


def test_a_positive_system_has_its_static_gain():
    # A thermal ladder: Metzler A and b >= 0, so that the peak gain is the response to a step (no change of sign).
    n = 12
    names = [f"T{i}" for i in range(n)]
    rows = {}
    for i, name in enumerate(names):
        near = [term(1, names[j]) for j in (i - 1, i + 1) if 0 <= j < n]
        rows[name] = [term(-3 if i else -2, name), *near] + ([term(1, "u")] if i == 0 else [])
    made = system(dict.fromkeys(names, 0), rows, sources=[FREE], duration=60)
    found = find_reach(made, {}, Build()).ranges
    a = np.diag([-2.0] + [-3.0] * (n - 1)) + np.eye(n, k=1) + np.eye(n, k=-1)
    static = np.linalg.solve(-a, np.eye(n)[0])
    np.testing.assert_allclose([found[name].high for name in names], static, rtol=1e-7)


def test_gains_never_fall_and_bound_what_ends_use():
    made = second_order(Fraction(1, 10), 20)
    field = field_of(made)
    bound = field.bind(field.weights({}))
    bounded = bounded_of(made, bound, {})
    gains = gains_of(bounded.responses, name_rows(bound), np.linspace(0, 20, 33))
    assert (np.diff(gains.values, axis=1) >= 0).all()
    assert gains.kinked.any()
    np.testing.assert_allclose(gains.values[:, -1], ends_of(bounded, name_rows(bound)).high, rtol=2e-9)
