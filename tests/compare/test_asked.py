"""Axes as they are written on the command line."""

from __future__ import annotations

import pytest

from patchplan.circuit.catalogue import load_catalogue
from patchplan.compare.asked import axes_of, percent_of
from patchplan.compare.records import Axes
from patchplan.errors import PatchplanError

CATALOGUE = load_catalogue()


def test_what_is_written_becomes_axes():
    found = axes_of(
        CATALOGUE, op_amps=["TL07x"], series=["E96", "E12"], tolerances=["0.1%", "1,2%"], supplies=["12", "-5,12 V"],
        speeds=["free", "real time", "2.5"],
    )  # fmt: skip
    assert found == Axes(
        ("TL07x",), ("E96", "E12"), ((0.001, None), (0.01, 0.02)), ((-12.0, 12.0), (-5.0, 12.0)),
        ("free", "real time", 2.5),
    )  # fmt: skip
    assert found.given
    assert not axes_of(CATALOGUE).given


@pytest.mark.parametrize(("text", "value"), [("1%", 1.0), ("1", 1.0), ("0.5 %", 0.5), ("0%", 0.0)])
def test_shares_are_percent_with_or_without_the_sign(text, value):
    assert percent_of(text, "--accept") == value


@pytest.mark.parametrize(
    ("asked", "said"),
    [
        ({"op_amps": ["TL7x"]}, '"TL7x" is no op amp that is known. Did you mean TL07x?'),
        ({"series": ["E25"]}, '"E25" is no series that is known. Did you mean E24?'),
        ({"tolerances": ["fine"]}, 'The tolerance is "fine", which is no percentage. Write one such as 1%.'),
        ({"tolerances": ["1%,-2%"]}, 'The tolerance of capacitors is "-2%", which is no percentage.'),
        ({"supplies": ["5,12"]}, '"5,12" is no supply. Write 15 for rails of -15 V and 15 V, or -5,12.'),
        ({"speeds": ["0"]}, '"0" is no speed. Write free, "real time" or how many times faster, such as 10.'),
    ],
)
def test_what_cannot_be_used_gets_a_sentence(asked, said):
    with pytest.raises(PatchplanError) as error:
        axes_of(CATALOGUE, **asked)
    assert str(error.value).startswith(said)
