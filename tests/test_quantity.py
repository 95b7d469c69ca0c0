"""Numbers with suffixes, percent signs and units, and engineering notation."""

from __future__ import annotations

import re
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from patchplan.quantity import SUFFIXES, engineering, parse_number, parse_quantity, unit_prefix


@pytest.mark.parametrize(
    ("text", "value", "unit"),
    [
        ("4.7k", Fraction(4700), ""),
        ("12e3", Fraction(12000), ""),
        ("-.5", Fraction(-1, 2), ""),
        ("+3.", Fraction(3), ""),
        ("2%", Fraction(1, 50), ""),
        ("2 %", Fraction(1, 50), ""),
        ("0.1%", Fraction(1, 1000), ""),
        ("80 kg", Fraction(80), "kg"),
        ("12k N/m", Fraction(12000), "N/m"),
        ("1.5e-3 m/s^2", Fraction(3, 2000), "m/s^2"),
        ("5 m", Fraction(5), "m"),
        ("20 °C", Fraction(20), "°C"),
        (" 10n ", Fraction(1, 10**8), ""),
    ],
)
def test_quantity_is_exact(text, value, unit):
    assert parse_quantity(text) == (value, unit)
    assert parse_number(text) == value


# SI prefixes, BIPM brochure, 9th edition, table 7.
@pytest.mark.parametrize(
    ("suffix", "power"),
    [("f", -15), ("p", -12), ("n", -9), ("u", -6), ("m", -3), ("k", 3), ("M", 6), ("G", 9), ("T", 12)],
)
def test_every_suffix_is_its_si_prefix(suffix, power):
    assert parse_number(f"3{suffix}") == 3 * Fraction(10) ** power
    assert len(SUFFIXES) == 9


@pytest.mark.parametrize("text", ["", "k", "4.7 k", "4.7kk", "80kg", "1,5", "nan", "inf", "0x10", "1_000", "1e", "--1"])
def test_what_is_no_number_is_named(text):
    with pytest.raises(ValueError, match=re.escape(f'"{text}"')):
        parse_number(text)


@pytest.mark.parametrize("text", ["1e999999999", "1e-101", "9" * 61])
def test_numbers_beyond_all_use_are_refused_at_once(text):
    with pytest.raises(ValueError, match="over 60 digits or an exponent beyond 100"):
        parse_number(text)


@pytest.mark.parametrize(
    ("value", "unit", "digits", "text"),
    [
        (4700, "Ω", 3, "4.7 kΩ"),
        (5.5555e-3, "s", 3, "5.56 ms"),
        (1e-9, "F", 3, "1 nF"),
        (2.2e-6, "F", 3, "2.2 µF"),
        (999.96, "Ω", 3, "1 kΩ"),
        (-0.0123456, "V", 4, "-12.35 mV"),
        (470e3, "Ω", 2, "470 kΩ"),
        (0.0, "V", 3, "0 V"),
        (-0.0, "V", 3, "0 V"),
        (Fraction(1, 3), "", 3, "333m"),
        (100.0, "", 3, "100"),
        (1e20, "Hz", 3, "1e+20 Hz"),
        (float("inf"), "s", 3, "inf s"),
    ],
)
def test_engineering_notation(value, unit, digits, text):
    assert engineering(value, unit, digits) == text


@given(st.floats(min_value=1e-14, max_value=1e14))
def test_engineering_without_unit_reads_back(value):
    back = float(parse_number(engineering(value, "", 9).replace("µ", "u")))
    assert back == pytest.approx(value, rel=1e-8)


# Symbols and prefixes: BIPM brochure, 9th edition, tables 2, 4, 7 and 8.
@pytest.mark.parametrize(
    ("unit", "found"),
    [
        ("mH", ("m", "H")), ("uF", ("u", "F")), ("µF", ("µ", "F")), ("kΩ", ("k", "Ω")), ("ms", ("m", "s")),
        ("cm", ("c", "m")), ("daN", ("da", "N")), ("N/mm^2", ("m", "m")), ("V*(us)", ("u", "s")), ("mm²", ("m", "m")),
        ("keV", ("k", "eV")), ("mNm", ("m", "Nm")), ("N mm", ("m", "m")), ("m/s·kPa", ("k", "Pa")),
        ("N/m", None), ("kg", None), ("J/(kg*K)", None), ("m/s^2", None), ("min", None), ("mol", None), ("rad/s", None),
        ("cd", None), ("Pa", None), ("Hz", None), ("ohm", None), ("T", None), ("°C", None), ("Nm", None), ("day", None),
        ("rpm", None), ("h", None), ("", None),
    ],
)  # fmt: skip
def test_prefix_of_a_unit(unit, found):
    assert unit_prefix(unit) == found


def test_a_unit_named_plain_has_no_prefix():
    assert unit_prefix("V/ms", ("ms",)) is None
    assert unit_prefix("mV/ms", ("ms",)) == ("m", "V")
