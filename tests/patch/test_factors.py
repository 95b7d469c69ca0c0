"""Sums taken out as factors: fewer multipliers, the same equations."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from patchplan.equation.system import System
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.factors import factored
from patchplan.patch.read_back import read_back
from tests.systems import lorenz, system, term, van_der_pol


def one_row(*terms):
    names = ("w", "x", "y", "z")
    return system(dict.fromkeys(names, 1), {n: terms if n == "x" else [term(-1, n)] for n in names})


def multipliers(made: System, *, factoring: bool) -> int:
    return build_patch(Form(made), factoring=factoring).counts().get("multiplier", 0)


FORMS = {
    "x*(y + z + w)": (one_row(term(-1, "x", "y"), term(-1, "x", "z"), term(-2, "x", "w")), 3, 1, 1),
    "(1 - x^2)*(y + z)": (
        one_row(term(1, "y"), term(1, "z"), term(-1, "x", "x", "y"), term(-1, "x", "x", "z")), 3, 2, 1
    ),
    "(1 + 2*x)*(2 + 3*y)*z": (
        one_row(term(2, "z"), term(3, "y", "z"), term(4, "x", "z"), term(6, "x", "y", "z")), 3, 2, 1
    ),
    "(1 + 2*x + 3*x^2)*(2 + 3*y + 4*y^2)": (
        one_row(*(term((1 + i) * (2 + j), *"x" * i, *"y" * j) for i in range(3) for j in range(3))), 6, 3, 1
    ),
    "x*(y + 2*z), of two rows": (
        system(
            {"x": 1, "y": 1, "z": 1},
            {
                "x": [term(-1, "x", "y"), term(-2, "x", "z")],
                "y": [term("1/3", "x", "y"), term("2/3", "x", "z"), term(-1, "y")],
                "z": [term(-1, "z")],
            },
        ), 2, 1, 1
    ),
    "(x + y)^2": (one_row(term(1, "x", "x"), term(2, "x", "y"), term(1, "y", "y")), 3, 1, 1),
    "-2*(x - y/3 + 2*z)^2": (
        one_row(
            term(-2, "x", "x"), term("-2/9", "y", "y"), term(-8, "z", "z"),
            term("4/3", "x", "y"), term(-8, "x", "z"), term("8/3", "y", "z"),
        ), 6, 1, 1
    ),
    "w*(x + y)^2": (one_row(term(1, "w", "x", "x"), term(2, "w", "x", "y"), term(1, "w", "y", "y")), 5, 2, 1),
    "(y + z)^2 + w*(y + z)": (
        one_row(term(1, "y", "y"), term(2, "y", "z"), term(1, "z", "z"), term(1, "w", "y"), term(1, "w", "z")), 5, 1, 2
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", FORMS)
def test_factors_save_multipliers(name):
    """Counted by hand: each factored form takes one multiplier for each product sign in it, shared ones once."""
    made, expanded, fewest, summers = FORMS[name]
    assert multipliers(made, factoring=False) == expanded
    assert multipliers(made, factoring=True) == fewest
    assert len(build_patch(Form(made)).factors) == summers


def test_three_species_take_a_multiplier_each():
    names = ("a", "b", "c")
    rows = {n: [term(1, n), *(term(-1 if m == n else -2, n, m) for m in names)] for n in names}
    made = system(dict.fromkeys(names, 1), rows)
    patch = build_patch(Form(made))
    assert patch.counts()["multiplier"] == 3
    assert multipliers(made, factoring=False) == 6


@pytest.mark.parametrize("made", [van_der_pol(), lorenz(), one_row(term(-1, "x", "x"), term(2, "x"), term(1, "y"))])
def test_rows_stay_where_no_multiplier_is_saved(made):
    assert factored(made.rows) == (list(made.rows), [])
    assert build_patch(Form(made)).factors == ()


def test_a_watched_sum_serves_as_factor():
    """Twice the sum that the products want is watched: the board has that summer in any case."""
    rows = {
        "x": [term(-1, "x", "y"), term(-3, "x", "z")],
        "y": [term(-1, "y")],
        "z": [term(1, "z", "y"), term(3, "z", "z")],
    }
    made = system(dict.fromkeys(rows, 1), rows, signals={"load": [term(2, "y"), term(6, "z")]}, watch=["x", "load"])
    patch = build_patch(Form(made))
    assert patch.counts()["multiplier"] == 2
    assert [s.signal for s in patch.stages if s.kind == "summer" and not s.signal.startswith("part of")] == ["load"]
    assert patch.factors == ("load",)
    found = read_back(patch, ())
    assert [found[row.name] for row in made.rows] == list(made.rows)


def test_a_watched_square_is_not_its_own_factor():
    rows = {"x": [term(-1, "x")], "y": [term(-1, "y")]}
    square = [term(1, "x", "x"), term(2, "x", "y"), term(1, "y", "y")]
    made = system(
        dict.fromkeys(rows, 1), rows, signals={"sum": [term(1, "x"), term(1, "y")], "q": square}, watch=["sum", "q"]
    )
    patch = build_patch(Form(made))
    assert patch.counts()["multiplier"] == 1
    assert patch.factors == ("sum",)


TERMS = st.builds(
    lambda c, f: term(c, *f),
    st.sampled_from([-2, -1, 1, 2]),
    st.lists(st.sampled_from(["x", "y", "z"]), max_size=3),
)


@settings(max_examples=25, deadline=None)
@given(st.lists(st.lists(TERMS, min_size=2, max_size=6), min_size=3, max_size=3))
def test_random_systems_read_back_with_no_more_multipliers(rows):
    made = system(dict.fromkeys("xyz", 1), dict(zip("xyz", rows, strict=True)))
    if not all(row.terms for row in made.rows):
        return
    patch = build_patch(Form(made))
    found = read_back(patch, ())
    assert [found[row.name] for row in made.rows] == list(made.rows)
    assert patch.counts().get("multiplier", 0) <= multipliers(made, factoring=False)


def test_a_large_system_is_not_searched_long():
    """The work is bounded by terms: some 200 products in 100 rows, of which neighbouring rows share factors."""
    names = [f"x{i}" for i in range(100)]
    rows = {n: [term(-1, n), term(1, n, names[i - 1]), term(2, n, names[i - 2])] for i, n in enumerate(names)}
    made = system(dict.fromkeys(names, 1), rows)
    changed, sums = factored(made.rows)
    assert len(changed) == 100
    assert 0 < len(sums) <= 100
