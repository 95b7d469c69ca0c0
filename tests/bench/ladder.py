"""Text of a linear thermal ladder of n nodes: one heated bar, cut into more and more pieces."""

from __future__ import annotations


def ladder_text(n: int) -> str:
    """Problem file of a heated bar of ``n`` pieces with one watched signal.

    Heat takes 100 min through the whole bar, however fine it is cut, so that every piece gets warm within the run:
    a ladder whose far end stays cold has no sensible scaling.
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
burner = "60*step(t)"
"""
