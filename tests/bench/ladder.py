"""Text of a linear thermal ladder of n nodes: the same bar as equations/thermal_chain.toml, cut finer."""

from __future__ import annotations


def ladder_text(n: int) -> str:
    """Problem file of a heated bar of ``n`` pieces with one watched signal.

    The run gets no longer with n: the time constant of a piece stays 1 min, so that the number of states is all
    that changes.
    """
    rows = ["T1' = (burner - T1 + T2)/tau - T1/air"]
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
watch = ["T5"]

[parameters]
tau = 1.0
air = 20.0

[start]
{start}

[inputs]
burner = "60*step(t)"
"""
