"""A System as scipy solves it, for comparison with solutions found another way."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from scipy.integrate import solve_ivp

from patchplan.equation.explicit import build_system, expanded
from patchplan.equation.reader import read_problem
from patchplan.equation.system import System


def built(equations, *, duration="10", **tables):
    """System of equations; TOML tables as text: ``start="x = 0"``, ``inputs=...``, ``top='watch = ["x"]'``."""
    return build_system(problem(equations, duration=duration, **tables))


def problem(equations, *, duration="10", top="", **tables):
    """Problem read from the same."""
    lines = [f"equations = [{', '.join(chr(34) + e + chr(34) for e in equations)}]", f"duration = {duration}", top]
    for name, text in tables.items():
        lines += [f"[{name}]", text]
    return read_problem("\n".join(lines) + "\n")


def rates(system: System, knobs=None):
    """Functions (states, t) -> rates and -> signals of the expanded system."""
    rows = expanded(system)
    gains = {k.name: float(k.value) for k in system.knobs} | (knobs or {})
    waveforms = {s.name: s.waveform for s in system.sources}
    names = [s.name for s in system.states]

    def value(row, known):
        return sum(
            float(t.coefficient)
            * np.prod([gains[k] for k in t.knobs], initial=1.0)
            * np.prod([known[n] ** p for n, p in t.factors], axis=0, initial=1.0)
            for t in row.terms
        )

    def known(t, x, *, before=False):
        t = np.atleast_1d(np.asarray(t, dtype=float))
        table = {n: w.before(t) if before else w.values(t) for n, w in waveforms.items()}
        return {n: v[0] if v.size == 1 else v for n, v in table.items()} | dict(zip(names, x, strict=True))

    states = rows[: len(names)]
    return (
        lambda t, x: np.array([value(r, known(t, x)) for r in states]),
        lambda t, x: {r.name: value(r, known(t, x)) + 0 * t for r in rows[len(names) :]},
    )


def simulate(system: System, times, knobs=None):
    """Every state and signal at rising times, by name; restarted at jumps of the sources."""
    rate, signals = rates(system, knobs)
    duration = float(system.duration)
    jumps = sorted({j for s in system.sources for j in s.waveform.jumps(duration)})
    edges = [0.0, *jumps, duration]
    x = np.array([float(s.start) for s in system.states])
    found = np.full((len(x), len(times)), np.nan)
    for left, right in pairwise(edges):
        inside = (times >= left) & (times <= right)
        at = np.unique(np.concatenate([times[inside], [right]]))
        run = solve_ivp(rate, (left, right), x, t_eval=at, method="DOP853", rtol=1e-10, atol=1e-12)
        found[:, inside] = run.y[:, np.isin(at, times[inside])]
        x = run.y[:, -1]
    result = dict(zip((s.name for s in system.states), found, strict=True))
    return result | signals(times, found)
