"""What the parts offer on a supply, and the sentences where they do not fit."""

import math

import pytest

from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.target import check_multiplier, target_of
from patchplan.equation.problem import Build
from patchplan.errors import CannotBuild

CATALOGUE = load_catalogue()
FIVE_VOLTS = {"supply": (-2.5, 2.5), "op_amp": "OPA4340", "reference": 2.0}


def test_default_target():
    target = target_of(Build(), CATALOGUE)
    assert (target.op_amp.low, target.op_amp.high) == (-12.0, 12.0)
    assert target.op_amp.gain_bandwidth == pytest.approx(2 * math.pi * 3e6)
    assert (target.multiplier.scale, target.multiplier.limit) == (10.0, 10.0)
    assert target.resistors[0] == 2e3
    assert target.resistors[-1] == 1e6
    assert target.capacitors == (1e-9, 1.5e-9, 2.2e-9, 3.3e-9, 4.7e-9, 6.8e-9, 1e-8, 1.5e-8, 2.2e-8, 3.3e-8, 4.7e-8,
                                 6.8e-8, 1e-7, 1.5e-7, 2.2e-7, 3.3e-7, 4.7e-7, 6.8e-7, 1e-6)  # fmt: skip
    assert target.switch_on == CATALOGUE.switches["DG413"].si("on_resistance")


def test_a_free_run_has_no_switches():
    target = target_of(Build(run="free"), CATALOGUE)
    assert (target.switch_on, target.switch_leakage) == (0.0, 0.0)


def test_a_low_supply_gets_its_own_switch_and_limits():
    target = target_of(Build(**FIVE_VOLTS), CATALOGUE)
    assert target.switch_on == CATALOGUE.switches["ADG613"].si("on_resistance")
    assert target.op_amp.high == pytest.approx(2.4)


def test_a_low_multiplier_swing_sets_its_limit():
    target = target_of(Build(supply=(-9.0, 9.0), reference=5.0), CATALOGUE)
    assert target.multiplier.limit == pytest.approx(5.0)


@pytest.mark.parametrize(
    ("wishes", "sentence"),
    [
        ({"supply": (-20.0, 20.0)}, r"-20 V to 20 V is 40 V in total; TL07x takes 10 V to 36 V\."),
        ({"reference": 12.5}, r"The reference of 12\.5 V is outside the swing of TL07x, -12 V to 12 V"),
        ({"supply": (0.0, 15.0), "reference": 2.0}, r"Ground must lie inside the swing of TL07x"),
        ({"op_amp": "TL0"}, r"The op amp TL0 is not in the catalogue\."),
        ({"resistor_limits": (2.5e3, 2.6e3)}, r"The series E24 has no resistor between 2500 and 2600\."),
    ],
)
def test_what_does_not_fit_is_said(wishes, sentence):
    with pytest.raises(CannotBuild, match=sentence):
        target_of(Build(**wishes), CATALOGUE)


def test_a_supply_too_low_for_the_multiplier_is_said():
    with pytest.raises(CannotBuild, match=r"5 V in total; AD633 takes 16 V to 36 V"):
        check_multiplier(Build(**FIVE_VOLTS), CATALOGUE)
