"""Texts of linear ladders of n states, for benchmarks and tests of growth."""

from __future__ import annotations

from collections.abc import Callable


def ladder_text(n: int, burner: str = '"60*step(t)"') -> str:
    """Problem file of a heated bar of ``n`` pieces with one watched signal.

    Heat takes 100 min through the whole bar, however fine it is cut, so that every piece gets warm within the run:
    a ladder whose far end stays cold has no sensible scaling. ``burner`` is the input, as TOML.
    """
    rows = ["T1' = (burner - 2*T1 + T2)/tau - T1/air"]
    rows += [f"T{i}' = (T{i - 1} - 2*T{i} + T{i + 1})/tau - T{i}/air" for i in range(2, n)]
    rows += [f"T{n}' = (T{n - 1} - T{n})/tau - T{n}/air"]
    listed = "\n".join(f'  "{row}",' for row in rows)
    start = "\n".join(f"T{i} = 0.0" for i in range(1, n + 1))
    return f"""title = "Heated bar of {n} pieces"
equations = [
{listed}
]
duration = 60.0
time_unit = "min"
watch = ["T{n // 2}"]

[parameters]
tau = "100/{n}^2"
air = 50.0

[start]
{start}

[inputs]
burner = {burner}
"""


def line_text(n: int, u: str = '"step(t)"') -> str:
    """Problem file of a delay line of inductors and capacitors, matched at both ends, ``n`` (even) states.

    A step takes 1 s through the whole line, however fine it is cut. ``u`` is the input, as TOML.
    """
    rows = []
    for k in range(1, n // 2 + 1):
        before = "u - i1" if k == 1 else f"v{k - 1}"
        after = f"v{k}" if k == n // 2 else f"i{k + 1}"
        rows += [f"i{k}' = ({before} - v{k})/tau", f"v{k}' = (i{k} - {after})/tau"]
    listed = "\n".join(f'  "{row}",' for row in rows)
    start = "\n".join(f"i{k} = 0.0\nv{k} = 0.0" for k in range(1, n // 2 + 1))
    return f"""title = "Delay line of {n // 2} sections"
equations = [
{listed}
]
duration = 2.0
watch = ["v{n // 2}"]

[parameters]
tau = "1/{n // 2}"

[start]
{start}

[inputs]
u = {u}
"""


#: What makes the problem file of each ladder.
LADDERS: dict[str, Callable[[int], str]] = {
    "heated bar": ladder_text,
    "heated bar, bounded input": lambda n: ladder_text(n, "{ within = [0.0, 60.0] }"),
    "delay line": line_text,
    "delay line, bounded input": lambda n: line_text(n, "{ within = [-1.0, 1.0] }"),
}
