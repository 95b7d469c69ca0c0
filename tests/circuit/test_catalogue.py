"""The catalogue is complete and sane, and takes parts of one's own."""

import subprocess
import sys

import pytest

from patchplan.circuit.catalogue import FIGURES, catalogue_names, figure_value, load_catalogue
from patchplan.errors import ProblemFaults

CATALOGUE = load_catalogue()
KINDS = (CATALOGUE.op_amps, CATALOGUE.multipliers, CATALOGUE.switches, CATALOGUE.references)
ALL = [p for parts in KINDS for p in parts.values()]


@pytest.mark.parametrize("part", ALL, ids=lambda p: p.name)
def test_every_part_has_every_figure_with_unit_and_source(part):
    assert set(part.figures) == set(FIGURES[part.kind])
    assert all(f.source and f.unit == FIGURES[part.kind][k][0] for k, f in part.figures.items())
    assert part.si("supply_min") < part.si("supply_max")


@pytest.mark.parametrize("part", ALL, ids=lambda p: p.name)
def test_no_pin_of_a_package_is_used_twice(part):
    pins = [pin for group in part.pins.values() for pin in group]
    assert len(pins) == len(set(pins))
    assert set(part.operate + part.hold) <= set(part.sections)


def test_typical_offset_is_below_the_largest():
    for part in (*CATALOGUE.op_amps.values(), *CATALOGUE.multipliers.values()):
        assert part.si("offset") < part.si("offset_max")


def test_swing_at_the_least_supply_is_left():
    for part in CATALOGUE.op_amps.values():
        assert part.si("swing_low") + part.si("swing_high") < part.si("supply_min")


def test_names_are_those_of_the_catalogue():
    assert catalogue_names() == {"op_amp": list(CATALOGUE.op_amps), "multiplier": list(CATALOGUE.multipliers)}


def test_names_load_nothing_heavy():
    code = (
        "import sys; from patchplan.circuit.catalogue import catalogue_names; catalogue_names();"
        "sys.exit(any(m in sys.modules for m in ('numpy', 'scipy', 'sympy')))"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


@pytest.mark.parametrize(
    ("quantity", "unit", "value"),
    [
        ("13 V/us", "V/s", 13e6),
        ("2 kohm", "ohm", 2e3),
        ("18 nV/sqrt(Hz)", "V/sqrt(Hz)", 18e-9),
        ("0.25 %", "1", 0.0025),
        ("65 pA", "A", 65e-12),
        ("4.7k", "ohm", 4700.0),
        (3e6, "Hz", 3e6),
    ],
)
def test_figures_become_exact_si_values(quantity, unit, value):
    assert figure_value(quantity, unit) == value


def test_own_part_takes_over_what_it_does_not_say():
    own = load_catalogue({"mine": {"kind": "op amp", "like": "TL07x", "slew": "5 V/us"}}).op_amps["mine"]
    base = CATALOGUE.op_amps["TL07x"]
    assert own.si("slew") == 5e6
    assert own.figures["slew"].source == "stated in the problem file"
    assert own.figures["gain"] == base.figures["gain"]
    assert own.pins == base.pins


def test_own_switch_is_taken_before_the_catalogues():
    table = {
        "kind": "switch",
        "supply_min": 2,
        "supply_max": 40,
        "on_resistance": 5,
        "leakage": 0,
        "charge_injection": 0,
    }
    assert next(iter(load_catalogue({"relay": table}).switches)) == "relay"


def test_all_faults_of_own_parts_are_reported_at_once():
    with pytest.raises(ProblemFaults) as caught:
        load_catalogue(
            {
                "a": {"kind": "op amp", "like": "TL07x", "slw": "5 V/us", "gain": "3 A", "bias": -1, "slew": 0},
                "b": {"kind": "valve"},
                "c": {"kind": "op amp", "like": "TL08x"},
                "d": {"kind": "switch", "leakage": "0.1 nA"},
                "TL07x": {"kind": "op amp", "like": "OPA2134"},
            }
        )
    faults = {f.key: f"{f.found} {f.remedy}" for f in caught.value.faults}
    assert list(faults) == [
        "part.a.slw", "part.a.gain", "part.a.bias", "part.a.slew", "part.b.kind", "part.c.like", "part.d", "part.TL07x",
    ]  # fmt: skip
    assert faults["part.a.slw"] == "slw is no figure of this kind of part. Did you mean slew?"
    assert "'3 A' is no quantity in V/V" in faults["part.a.gain"]
    assert "missing: supply_min, supply_max, on_resistance, charge_injection." in faults["part.d"]


def test_own_multiplier_may_have_no_differential_inputs():
    own = load_catalogue({"plain": {"kind": "multiplier", "like": "AD633", "differential": False}}).multipliers
    assert not own["plain"].differential
    assert own["AD633"].differential
    with pytest.raises(ProblemFaults) as caught:
        load_catalogue(
            {
                "a": {"kind": "multiplier", "like": "AD633", "differential": "no"},
                "b": {"kind": "op amp", "like": "TL07x", "differential": True},
            }
        )
    assert [f.key for f in caught.value.faults] == ["part.a.differential", "part.b.differential"]
