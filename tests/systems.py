"""Small systems built by hand, for tests that start below the reader."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from fractions import Fraction
from itertools import pairwise

from patchplan.equation.system import Knob, Row, Source, State, System, Term, row_of
from patchplan.equation.tree import Name


def term(coefficient: Fraction | int | str, *factors: str, knobs: Sequence[str] = ()) -> Term:
    """coefficient * factors; repeat a name for its powers."""
    powers = sorted((n, factors.count(n)) for n in set(factors))
    return Term(Fraction(coefficient), tuple(powers), tuple(sorted(knobs)))


def knob(name: str, low: float, value: float, high: float) -> Knob:
    """A plain knob on a parameter of the same name."""
    return Knob(name, Name(name), (name,), *(Fraction(v) for v in (value, low, high)))


def system(
    states: Mapping[str, int | str],
    rows: Mapping[str, Sequence[Term]],
    *,
    signals: Mapping[str, Sequence[Term]] | None = None,
    sources: Sequence[Source] = (),
    knobs: Sequence[Knob] = (),
    watch: Sequence[str] = (),
    duration: Fraction | int | str = 20,
) -> System:
    """A System from plain mappings, in seconds."""
    made: tuple[Row, ...] = tuple(row_of(n, t) for n, t in rows.items())
    return System(
        tuple(State(n, Fraction(s)) for n, s in states.items()),
        made,
        tuple(row_of(n, t) for n, t in (signals or {}).items()),
        tuple(sources),
        tuple(knobs),
        (),
        tuple((w, 0) for w in (watch or states)),
        Fraction(duration),
        "s",
        Fraction(1),
    )


def van_der_pol() -> System:
    """Van der Pol 1926 with mu = 1."""
    rate = [term(1, "y'"), term(-1, "y", "y", "y'"), term(-1, "y")]
    return system({"y": 2, "y'": 0}, {"y": [term(1, "y'")], "y'": rate})


def lorenz() -> System:
    """Lorenz 1963, J. Atmos. Sci. 20, with the usual parameters."""
    return system(
        {"x": 0, "y": 1, "z": 0},
        {
            "x": [term(10, "y"), term(-10, "x")],
            "y": [term(28, "x"), term(-1, "y"), term(-1, "x", "z")],
            "z": [term(1, "x", "y"), term("-8/3", "z")],
        },
    )


def companion(order: int) -> System:
    """x^(n) = -(x + x' + ...): a chain of integrators with all-negative feedback."""
    names = ["x" + "'" * k for k in range(order)]
    rows = {low: [term(1, high)] for low, high in pairwise(names)}
    rows[names[-1]] = [term(-1, n) for n in names]
    return system(dict.fromkeys(names, 0), rows)
