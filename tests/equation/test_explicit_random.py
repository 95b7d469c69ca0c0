"""Random equations: the built system has the rates that the text has, as Python evaluates it."""

import random

import numpy as np
import pytest

from patchplan.equation.explicit import expanded
from tests.equation.simulated import built

STATES = ["x", "y", "z", "w"]
VALUES = {"k": 1.5, "c": 1.25, "pi": np.pi}
FUNCTIONS = {"sin": np.sin, "cos": np.cos, "exp": np.exp, "tanh": np.tanh, "abs": np.abs}


def formula(rng, names, depth=0):
    pick = rng.random()
    if depth > 3 or pick < 0.3:
        return rng.choice([*names, "t", "2", "0.5", "3", "pi", "k"])
    if pick < 0.6:
        return f"({formula(rng, names, depth + 1)} {rng.choice('+-')} {formula(rng, names, depth + 1)})"
    if pick < 0.8:
        return f"{formula(rng, names, depth + 1)}*{formula(rng, names, depth + 1)}"
    if pick < 0.86:
        return f"({formula(rng, names, depth + 1)})^{rng.choice('0123')}"
    if pick < 0.92:
        # Inside a function of time no adjustable parameter may stand.
        divisor = rng.choice(["c", "u", "2*c"] if names else ["t"])
        return f"({formula(rng, names, depth + 1)})/({divisor} + 7)"
    if pick < 0.95:
        return f"-({formula(rng, names, depth + 1)})"
    return f"{rng.choice(sorted(FUNCTIONS))}({formula(rng, [], 2)})"


def value_of(text, known):
    return float(eval(text.replace("^", "**"), {"__builtins__": {}}, {**VALUES, **FUNCTIONS, **known}))


@pytest.mark.parametrize("seed", range(40))
def test_rates_and_signals_are_those_of_the_text(seed):
    rng = random.Random(seed)
    names = [*STATES, "u", "v", "c", "e", "f"]
    rights = [formula(rng, names) for _ in STATES]
    e, f = formula(rng, ["x", "z", "u"]), formula(rng, ["e", "y", "c"])
    # A coupled pair, so that the solution is a real one: 2 y' - x' = ..., and the rest alone.
    lefts = ["x'", "2*y' - x'", "z'", "w'"]
    equations = [*map(" = ".join, zip(lefts, rights, strict=True)), f"e = {e}", f"f = {f}"]
    system = built(
        equations, duration="3", top='watch = ["u", "v", "e", "f", "x"]', inputs='u = "sin(t) + t*k"\nv = "exp(-t)"',
        parameters="k = 1.5\nc = { from = 1, to = 2, value = 1.25 }",
        start="x = \"0*c + 1\"\ny = 1\nz = 1\nw = 1",
    )  # fmt: skip
    draw = np.random.default_rng(seed)
    for time in (0.3, 1.234, 2.71):
        known = dict(zip(STATES, draw.uniform(-1, 1, 4), strict=True))
        text = known | {"t": time, "u": np.sin(time) + 1.5 * time, "v": np.exp(-time)}
        text["e"] = value_of(e, text)
        text["f"] = value_of(f, text)
        wanted = dict(zip(STATES, [value_of(r, text) for r in rights], strict=True))
        wanted["y"] = (wanted["y"] + wanted["x"]) / 2
        wanted |= {"e": text["e"], "f": text["f"]}
        known |= {s.name: s.waveform.values(np.array([time]))[0] for s in system.sources}
        gains = system.knob_values()
        for row in expanded(system):
            parts = [
                float(t.coefficient)
                * np.prod([gains[k] for k in t.knobs])
                * np.prod([float(known[n]) ** p for n, p in t.factors])
                for t in row.terms
            ]
            # Multiplied out, large terms may cancel; rounding goes with the largest of them.
            assert sum(parts) == pytest.approx(wanted[row.name], rel=1e-9, abs=1e-11 * max(map(abs, parts), default=1))
