"""Which combinations are compared."""

from __future__ import annotations

from dataclasses import replace

import pytest

from patchplan.circuit.catalogue import load_catalogue
from patchplan.compare.grid import MOST, grid_of, op_amps_for, other_speeds, product_of
from patchplan.compare.records import Axes
from patchplan.equation.problem import Build

CATALOGUE = load_catalogue()


def test_axes_that_are_given_are_combined_and_others_stay():
    axes = Axes(op_amps=("TL07x", "OPA2277"), supplies=((-15.0, 15.0), (-12.0, 12.0)), speeds=("free", 3.0))
    builds = product_of([Build(resistors="E48")], axes, reference_stated=False)
    assert len(set(builds)) == len(builds) == 8
    assert {b.resistors for b in builds} == {"E48"}
    assert {(b.supply[1], b.reference) for b in builds} == {(15.0, 10.0), (12.0, 5.0)}


def test_a_reference_that_is_stated_stays_on_another_supply():
    builds = product_of([Build()], Axes(supplies=((-12.0, 12.0),)), reference_stated=True)
    assert [b.reference for b in builds] == [10.0]


def test_the_planners_grid_is_bounded_and_varies_forms_and_speeds():
    forms = [Build(forms=(("y", "cascade"),)), Build(forms=(("y", "balanced"),)), Build(offsets=False)]
    builds = grid_of(forms, CATALOGUE, ("real time", 3.0), reference_stated=False)
    assert builds[0] == forms[0]
    assert len(set(builds)) == len(builds) == MOST
    assert {b.forms for b in builds} == {f.forms for f in forms[:2]}
    assert "real time" in {b.speed for b in builds}
    assert {b.supply[1] for b in builds} == {15.0, 12.0}


@pytest.mark.parametrize("supply", [(-15.0, 15.0), (-2.5, 2.5)])
def test_op_amps_of_the_grid_take_the_supply_and_stand_for_no_class(supply):
    own = "TL07x" if supply[1] == 15.0 else "MCP6004"
    names = op_amps_for(Build(supply=supply, op_amp=own), CATALOGUE)
    assert names[0] == own
    total = supply[1] - supply[0]
    for name in names:
        part = CATALOGUE.op_amps[name]
        assert part.si("supply_min") <= total <= part.si("supply_max")
        assert not part.text.startswith("any ")


def test_other_speeds_lie_inside_the_window_and_apart():
    free = list(other_speeds(Build(), (1e-4, 10.0), 0.02, 1.0))
    assert free == ["real time", 5.0, 500.0]
    assert list(other_speeds(Build(), (0.015, 0.5), 0.02, 1.0)) == [5.0]
    # Ends of the window bound a slower and a faster speed.
    assert list(other_speeds(Build(), (0.01, 0.1), 0.02, 1.0)) == [10.0, 100.0]
    assert list(other_speeds(replace(Build(), speed=50.0), (0.015, 0.025), 0.02, 1.0)) == ["free"]
    assert list(other_speeds(Build(), (0.2, 0.1), 0.02, 1.0)) == []
