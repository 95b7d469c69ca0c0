"""Ranges of every node over the adjustable box, against a dense scan of the parameters with scipy."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import replace
from fractions import Fraction
from itertools import product

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from patchplan.equation.explicit import build_system
from patchplan.equation.problem import Build, Parameter
from patchplan.equation.reader import read_problem
from patchplan.equation.system import System
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.records import Patch
from patchplan.ranges import Ranges, find_ranges
from patchplan.reach.reference import find_reach
from tests.systems import knob, system, term

#: Part of a node's peak that a search among settings may miss of a worst case that lies inside the box.
MISSED = 2e-3

DAMPER = """
title = "Adjustable damper"
equations = ["x'' = -d*x' - x"]
duration = 10.0
watch = ["x"]
[parameters]
d = { from = 0.1, to = 4.0, value = 0.5 }
[start]
x = 1.0
"x'" = 0.0
"""
FORCED = """
title = "Damping that changes its sign"
equations = ["x'' = -mu*x' - 4*x + 0.5*sin(t)"]
duration = 10.0
watch = ["x"]
[parameters]
mu = { from = -0.2, to = 1, value = 0.4 }
[start]
x = 1.0
"x'" = 0.0
"""


def scan(
    rates: Callable[[float, np.ndarray, Mapping[str, np.ndarray]], np.ndarray],
    start: np.ndarray,
    knobs: Mapping[str, np.ndarray],
    times: np.ndarray,
) -> np.ndarray:
    """States at every setting of the knobs, shape ``(n, m, n_times)``, by an explicit method of order 8."""
    m = next(iter(knobs.values())).size
    shape = start.size, m
    found = solve_ivp(
        lambda t, x: rates(t, x.reshape(shape), knobs).ravel(),
        (0.0, times[-1]),
        np.repeat(start, m),
        method="DOP853",
        t_eval=times,
        rtol=1e-7,
        atol=1e-9,
    )
    assert found.success
    return found.y.reshape(*shape, times.size)


def on_nodes(patch: Patch, signals: Mapping[str, np.ndarray], knobs: Mapping[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Signal of every node at every setting, as the record of stages defines it, shape ``(m, n_times)`` each."""
    found: dict[str, np.ndarray] = {}
    for stage in patch.stages:
        inputs = [found.get(w.source) for w in stage.wires]
        if stage.kind == "reference":
            found[stage.node] = np.ones(1)
        elif stage.kind in ("integrator", "source"):
            found[stage.node] = signals[stage.signal]
        elif stage.kind == "multiplier":
            found[stage.node] = inputs[0] * inputs[1]
        elif stage.kind == "inverter":
            found[stage.node] = inputs[0]
        else:
            pairs = list(zip(stage.wires, inputs, strict=True))[: 1 if stage.bipolar else None]
            factor = knobs[stage.knob][:, None] if stage.knob else 1.0
            found[stage.node] = factor * sum(float(w.coefficient) * x for w, x in pairs)
    return found


def assert_ranges_hold(ranges: Ranges, curves: Mapping[str, np.ndarray], times: np.ndarray) -> None:
    """Every node's range and rate holds the scan, and no range is wider than a third more than the scan."""
    assert set(ranges.nodes) == set(curves)
    for node, values in curves.items():
        found = ranges.nodes[node]
        peak = np.abs(values).max()
        assert found.low <= values.min() + MISSED * peak, node
        assert found.high >= values.max() - MISSED * peak, node
        assert found.peak <= peak * 4 / 3, node
        if values.shape[-1] == times.size:
            # Differences of the scan are slopes at the middles of its steps, never steeper than the steepest slope.
            assert found.rate >= np.abs(np.diff(values) / np.diff(times)).max() * (1 - MISSED), node


def ranges_of(made: System) -> tuple[Patch, Ranges]:
    form = Form(made)
    patch = build_patch(form)
    return patch, find_ranges(patch, form, find_reach(made, {}, Build()))


def damper(t: float, x: np.ndarray, knobs: Mapping[str, np.ndarray]) -> np.ndarray:
    return np.stack((x[1], -knobs["d"] * x[1] - x[0]))


def forced(t: float, x: np.ndarray, knobs: Mapping[str, np.ndarray]) -> np.ndarray:
    return np.stack((x[1], -knobs["mu"] * x[1] - 4 * x[0] + 0.5 * np.sin(t)))


@pytest.mark.parametrize(
    ("text", "rates", "name", "span"),
    [(DAMPER, damper, "d", (0.1, 4.0)), (FORCED, forced, "mu", (-0.2, 1.0))],
    ids=["damper", "forced"],
)
def test_every_node_holds_over_the_knob(text, rates, name, span):
    patch, ranges = ranges_of(build_system(read_problem(text)))
    times, knobs = np.linspace(0, 10, 1001), {name: np.linspace(*span, 201)}
    x = scan(rates, np.array([1.0, 0.0]), knobs, times)
    assert_ranges_hold(ranges, on_nodes(patch, {"x": x[0], "x'": x[1], "sin(t)": np.sin(times)}, knobs), times)


def test_a_worst_case_at_a_corner_of_many_knobs():
    terms = [term(-1, "x", knobs=["a"]), term(-1, "v", knobs=["b"]), term(-1, "x", "x", "x", knobs=["c"])]
    terms += [term(1, "w", knobs=["d", "e"]), term(1, "w", "w", knobs=["f"])]
    knobs = [knob("a", 1, 2, 3), knob("b", 0.2, 2, 3), knob("c", 0, 2, 3)]
    knobs += [knob("d", -1, 2, 3), knob("e", 0.3, 0.5, 1), knob("f", -1, 0, 1)]
    made = adjustable(
        system({"x": 1, "v": 0, "w": 1}, {"x": [term(1, "v")], "v": terms, "w": [term(-1, "w")]}, knobs=knobs)
    )
    patch, ranges = ranges_of(made)
    corners = np.array(list(product(*((float(k.low), float(k.high)) for k in knobs)))).T
    settings, times = dict(zip("abcdef", corners, strict=True)), np.linspace(0, 20, 801)
    x = scan(rates_of(made), np.array([1.0, 0.0, 1.0]), settings, times)
    assert_ranges_hold(ranges, on_nodes(patch, dict(zip("xvw", x, strict=True)), settings), times)


def adjustable(made: System) -> System:
    """Every knob of a System on a parameter of its own."""
    return replace(made, adjustable=tuple(Parameter(k.name, k.value, k.low, k.high) for k in made.knobs))


def random_system(seed: int, *, linear: bool) -> System:
    """A linear or quadratic system that loses energy, with one or two knobs in front of some of its terms.

    Terms between two states come in pairs that pass energy from one to the other, so that no setting grows.
    """
    random = np.random.default_rng(seed)
    n, names = int(random.integers(2, 4)), ["x", "y", "z"]
    knobs = [knob("a", 0.2, 1, 3), knob("b", -1, 0.5, 2)][: int(random.integers(1, 3))]
    rows = {name: [term(Fraction(int(random.integers(1, 6)), -10), name)] for name in names[:n]}
    rows["x"] = [term(Fraction(-3, 10), "x", knobs=["a"])]
    for i in range(n - 1):
        first, second = names[i], names[i + 1]
        size = Fraction(int(random.integers(5, 20)), 10)
        used = [knobs[i % len(knobs)].name] if random.random() < 0.6 else []
        common = [first] if not linear and random.random() < 0.7 else []
        rows[first].append(term(size, second, *common, knobs=used))
        rows[second].append(term(-size, first, *common, knobs=used))
    start = {name: str(Fraction(int(random.integers(-10, 11)), 10)) for name in rows}
    return adjustable(system(start, rows, knobs=knobs, duration=8))


def rates_of(made: System) -> Callable[[float, np.ndarray, Mapping[str, np.ndarray]], np.ndarray]:
    """The rows of a System without sources or signals, term by term."""
    place = {s.name: i for i, s in enumerate(made.states)}

    def rates(t: float, x: np.ndarray, knobs: Mapping[str, np.ndarray]) -> np.ndarray:
        out = np.zeros_like(x)
        for i, row in enumerate(made.rows):
            for t_ in row.terms:
                product = float(t_.coefficient) * np.ones(x.shape[1])
                for name in t_.knobs:
                    product = product * knobs[name]
                for name, power in t_.factors:
                    product = product * x[place[name]] ** power
                out[i] += product
        return out

    return rates


@pytest.mark.parametrize("linear", [True, False], ids=["linear", "polynomial"])
@pytest.mark.parametrize("seed", range(6))
def test_every_node_holds_over_the_box_of_random_systems(seed, linear):
    made = random_system(seed, linear=linear)
    patch, ranges = ranges_of(made)
    axes = [np.linspace(float(k.low), float(k.high), 101 if len(made.knobs) == 1 else 21) for k in made.knobs]
    knobs = {k.name: g.ravel() for k, g in zip(made.knobs, np.meshgrid(*axes), strict=True)}
    times = np.linspace(0, 8, 401)
    start = np.array([float(s.start) for s in made.states])
    x = scan(rates_of(made), start, knobs, times)
    assert_ranges_hold(ranges, on_nodes(patch, dict(zip([s.name for s in made.states], x, strict=True)), knobs), times)


def test_one_knob_costs_little():
    made = build_system(read_problem(DAMPER))
    find_reach(made, {}, Build())
    begin = time.process_time()
    find_reach(made, {}, Build())
    assert time.process_time() - begin < 0.3
