"""What nothing beats, what is cheapest, what is nearest: held against plain loops over drawn figures."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from patchplan.compare.front import cheapest_first, excess, marked, nearest
from patchplan.compare.records import Option, Wish
from patchplan.equation.problem import Build

FEW = st.sampled_from([0.0, 0.5, 1.0, 2.0])
OPTIONS = st.lists(
    st.builds(
        Option,
        st.builds(Build, resistor_tolerance=st.sampled_from([0.01, 0.001])),
        FEW, FEW, st.integers(3, 5), st.integers(1, 2), FEW,
        fault=st.sampled_from(["", "", "", "No part takes this supply."]),
    ),
    max_size=12,
)  # fmt: skip


@given(OPTIONS)
def test_marked_are_those_that_no_other_beats(options):
    for option, found in zip(options, marked(options), strict=True):
        beaten = any(
            all(a <= b for a, b in zip(other.figures, option.figures, strict=True))
            and any(a < b for a, b in zip(other.figures, option.figures, strict=True))
            for other in options
            if not other.fault
        )
        assert found.best is (not option.fault and not beaten)


@given(OPTIONS, st.sampled_from([0.5, 1.0]), st.sampled_from([None, 1.0]))
def test_the_cheapest_meets_the_wish_and_none_that_does_has_fewer_packages_or_parts(options, error, spread):
    wish = Wish(error, spread)
    fits = [
        o for o in options
        if not o.fault and o.error_percent <= error and (spread is None or o.spread_percent <= spread)
    ]  # fmt: skip
    ranked = cheapest_first(options, wish)
    assert sorted(map(id, ranked)) == sorted(map(id, fits))
    for first in ranked[:1]:
        least = min((o.packages, o.parts) for o in fits)
        assert (first.packages, first.parts) == least
        coarsest = max(o.build.resistor_tolerance for o in fits if (o.packages, o.parts) == least)
        assert first.build.resistor_tolerance == coarsest


@given(OPTIONS)
def test_the_nearest_misses_the_wish_by_least(options):
    wish = Wish(0.25, 0.75)
    built = [o for o in options if not o.fault]
    found = nearest(options, wish)
    if found is None:
        assert not built
        return
    misses = [max(o.error_percent / 0.25, o.spread_percent / 0.75) for o in built]
    assert excess(found, wish) == min(misses)


def test_currents_within_a_tenth_tie_and_the_smaller_spread_decides():
    def option(current: float, spread: float, error: float = 0.5) -> Option:
        return Option(Build(), error, spread, 10, 2, current)

    worse, better, close, hungry = option(0.0100, 2.0), option(0.0105, 1.0), option(0.0105, 1.0, 0.4), option(0.02, 0.1)
    assert cheapest_first([hungry, worse, better, close], Wish(1.0)) == [close, better, worse, hungry]
