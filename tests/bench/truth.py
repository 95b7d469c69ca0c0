"""A second solver of the problem as written, which shares nothing with the package."""

from __future__ import annotations

import re
from collections.abc import Callable
from itertools import pairwise

import numpy as np
import sympy as sp
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from tests.bench.drawn import Drawn

Array = NDArray[np.float64]


def _step(x: Array) -> Array:
    return np.where(x >= 0, 1.0, 0.0)


FUNCTIONS: dict[str, Callable[..., Array]] = {
    "step": _step,
    "ramp": lambda x: np.maximum(x, 0.0),
    "pulse": lambda x, start, width: _step(x - start) - _step(x - start - width),
    "square": lambda x, period: np.where((x / period) % 1 < 0.5, 1.0, -1.0),
    "triangle": lambda x, period: 1 - np.abs(4 * ((x / period) % 1) - 2),
    "sawtooth": lambda x, period: 2 * ((x / period) % 1) - 1,
}


def formula(text: str) -> sp.Expr:
    """A generated expression in sympy's words; x'' becomes x_dd."""
    text = re.sub(r"([A-Za-z]\w*)('+)", lambda m: f"{m[1]}_{'d' * len(m[2])}", text).replace("^", "**")
    names = set(re.findall(r"[A-Za-z]\w*", text)) - {"sin", "cos", "exp", "tanh", *FUNCTIONS}
    table = {n: sp.Symbol(n) for n in names} | {f: sp.Function(f) for f in FUNCTIONS}
    return sp.sympify(text, locals=table)


class Truth:
    """Solution of a drawn problem.

    Attributes
    ----------
    names
        All states and definitions, in the problem file's spelling.
    """

    def __init__(self, drawn: Drawn) -> None:
        self.drawn = drawn
        states = [m + "'" * k for m, order in drawn.orders.items() for k in range(order)]
        self.names = (*states, *drawn.definitions)
        self._compile(states)
        self._solve(np.array([drawn.start[m] for m in states]))

    def _compile(self, states: list[str]) -> None:
        drawn, t = self.drawn, sp.Symbol("t")
        inputs = {sp.Symbol(n): formula(e) for n, e in drawn.inputs.items() if isinstance(e, str)}
        slopes = {sp.Symbol(f"{n}_d"): sp.diff(e, t) for n, e in inputs.items()}
        values = {sp.Symbol(n): v[0] for n, v in drawn.parameters.items()}
        written = {sp.Symbol(n): formula(e) for n, e in drawn.definitions.items()}
        tops = [formula(m + "'" * order) for m, order in drawn.orders.items()]
        left_right = [e.split(" = ") for e in drawn.equations]
        rests = [formula(a) - formula(b) for a, b in left_right]
        rests = [r.subs(written).subs(written).subs(slopes).subs(inputs).subs(values) for r in rests]
        slots = [sp.Symbol(f"s{i}_") for i in range(len(tops))]
        rests = [r.subs(dict(zip(tops, slots, strict=True))) for r in rests]
        arguments = [
            t,
            *(formula(m) for m in states),
            *(sp.Symbol(n) for n, e in drawn.inputs.items() if not isinstance(e, str)),
        ]
        modules = [FUNCTIONS, "numpy"]
        self._a = sp.lambdify(arguments, [[sp.diff(r, s) for s in slots] for r in rests], modules)
        self._b = sp.lambdify(arguments, [-r.subs(dict.fromkeys(slots, 0)) for r in rests], modules)
        outs = [written[sp.Symbol(n)].subs(written).subs(inputs).subs(values) for n in drawn.definitions]
        self._out = sp.lambdify(arguments, outs, modules)
        self._recorded = [e for e in drawn.inputs.values() if not isinstance(e, str)]

    def _slope(self, t: float, x: Array) -> Array:
        arguments = [t, *x, *(np.interp(t, *r) for r in self._recorded)]
        highest = np.linalg.solve(np.array(self._a(*arguments), float), np.array(self._b(*arguments), float))
        slope, place = [], 0
        for i, order in enumerate(self.drawn.orders.values()):
            slope += [*x[place + 1 : place + order], highest[i]]
            place += order
        return np.array(slope)

    def _solve(self, x: Array) -> None:
        duration = self.drawn.duration
        inside = sorted(j for j in set(self.drawn.jumps) if 1e-9 * duration < j < (1 - 1e-9) * duration)
        ends = [0.0, *inside, duration]
        sizes = [self.drawn.sizes[m] * self.drawn.rate**k for m, o in self.drawn.orders.items() for k in range(o)]
        self._pieces = []
        for a, b in pairwise(ends):
            # A point of the piece's inside stands for its ends, so that no jump is seen from the wrong side.
            edge = 1e-9 * (b - a)
            run = solve_ivp(
                lambda t, x, a=a, b=b, edge=edge: self._slope(float(np.clip(t, a + edge, b - edge)), x),
                (a, b), x, method="DOP853", rtol=1e-11, atol=1e-12 * np.array(sizes), dense_output=True,
            )  # fmt: skip
            if run.status != 0 or np.abs(run.y / np.array(sizes)[:, None]).max() > 1e4:
                raise ArithmeticError(f"no bounded solution: {run.message}")
            self._pieces.append((a, b, run.sol))
            x = run.y[:, -1]

    def at(self, times: Array) -> dict[str, Array]:
        """Every state and definition at times; of two equal times the first is before the jump."""
        last = len(self._pieces) - 1
        starts = np.array([p[0] for p in self._pieces])
        piece = np.clip(np.searchsorted(starts, times * (1 + 1e-12), side="right") - 1, 0, last)
        repeated = np.flatnonzero(np.diff(times) == 0)
        piece[repeated] = np.maximum(piece[repeated + 1] - 1, 0)
        columns = []
        for t, p in zip(times, piece, strict=True):
            a, b, sol = self._pieces[p]
            x, edge = sol(t), 1e-9 * (b - a)
            # As above; a recording has no jump.
            inner = float(np.clip(t, a + edge, b - edge))
            outs = self._out(inner, *x, *(np.interp(t, *r) for r in self._recorded))
            columns.append([*x, *(float(v) for v in outs)])
        return dict(zip(self.names, np.array(columns).T, strict=True))
