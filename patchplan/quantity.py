"""Numbers as people write them: "4.7k", "2%", "80 kg", and back."""

from __future__ import annotations

import math
import re
from collections.abc import Collection
from decimal import Decimal
from fractions import Fraction

#: Powers of ten of the suffixes that may be glued to a number.
SUFFIXES: dict[str, int] = {"f": -15, "p": -12, "n": -9, "u": -6, "m": -3, "k": 3, "M": 6, "G": 9, "T": 12}

#: Longest literal and largest power of ten: beyond them exact arithmetic only costs time.
MAX_DIGITS = 60
MAX_EXPONENT = 100

#: A plain number without sign and suffix.
NUMBER = re.compile(r"(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")

_QUANTITY = re.compile(
    rf"\s*(?P<number>[+-]?{NUMBER.pattern})(?P<suffix>[{''.join(SUFFIXES)}]?)"
    r"(?:\s*(?P<percent>%)|\s+(?P<unit>[^\W\d_][^\s%]*|°[^\s%]*))?\s*"
)

#: Powers of ten of the SI prefixes (BIPM brochure, 9th edition, table 7).
UNIT_PREFIXES = SUFFIXES | {
    "da": 1, "d": -1, "c": -2, "h": 2, "P": 15, "E": 18, "Z": 21, "Y": 24, "µ": -6, "μ": -6, "a": -18, "z": -21,
    "y": -24,
}  # fmt: skip
#: Units that prefixes are put before, and products of them that are written without a sign.
_UNITS = {
    "m", "g", "s", "A", "K", "mol", "cd", "Hz", "N", "Pa", "J", "W", "C", "V", "F", "ohm", "ohms", "Ohm", "Ω", "\u2126",
    "S", "Wb", "T", "H", "lm", "lx", "bar", "l", "L", "rad", "eV", "Bq", "Gy", "Sv", "kat",
    "Nm", "Ns", "Vs", "As", "Ws", "Wh", "Ah", "VA", "var",
}  # fmt: skip
_PREFIXES = {power: letter for letter, power in SUFFIXES.items()} | {-6: "µ", 0: ""}


def exact_number(text: str) -> Fraction:
    """Exact value of a plain decimal number.

    Raises
    ------
    ValueError
        For anything else, nan and inf, and for more digits or a larger exponent than is sensible.
    """
    if not re.fullmatch(rf"[+-]?{NUMBER.pattern}", text):
        raise ValueError(f"{shown(text)} is not a finite number.")
    mantissa, _, exponent = text.lower().partition("e")
    if len(mantissa) > MAX_DIGITS or len(exponent) > 5 or abs(int(exponent or "0")) > MAX_EXPONENT:
        raise ValueError(f"{shown(text)} has over {MAX_DIGITS} digits or an exponent beyond {MAX_EXPONENT}.")
    return Fraction(text)


def shown(text: str) -> str:
    """A text in quotes, shortened for a message."""
    return f'"{text}"' if len(text) <= 40 else f'"{text[:37]}..."'


def parse_quantity(text: str) -> tuple[Fraction, str]:
    """Value and unit of "4.7k", "2%" (0.02, no unit) or "80 kg".

    Raises
    ------
    ValueError
        With a sentence that names the text.
    """
    match = _QUANTITY.fullmatch(text)
    if match is None:
        raise ValueError(f"{shown(text)} is not a number.")
    value = exact_number(match["number"])
    unit = match["unit"] or ""
    # "5 m" is five metres and "5 T" five teslas; the other letters alone name no unit of common use.
    if unit in SUFFIXES and unit not in "mT":
        raise ValueError(f'In {shown(text)} the suffix "{unit}" stands apart from its number.')
    if match["suffix"]:
        value *= Fraction(10) ** SUFFIXES[match["suffix"]]
    return (value / 100 if match["percent"] else value), unit


def parse_number(text: str) -> Fraction:
    """Exact value of a number with at most one glued suffix ``f p n u m k M G T``, a percent sign or a unit.

    Raises
    ------
    ValueError
        With a sentence that names the text.
    """
    return parse_quantity(text)[0]


def unit_prefix(unit: str, plain: Collection[str] = ()) -> tuple[str, str] | None:
    """Prefix and symbol of the first part of a unit that carries a prefix: ("m", "H") for "mH"; None for "N/m".

    Parameters
    ----------
    plain
        Parts that count as units of their own.
    """
    for part in re.findall(r"[A-Za-z°µμΩ\u2126]+", unit):
        if part in _UNITS or part in plain or part == "kg":
            continue
        for prefix in UNIT_PREFIXES:
            if part.startswith(prefix) and part[len(prefix) :] in _UNITS:
                return prefix, part[len(prefix) :]
    return None


def engineering(value: float | Fraction, unit: str, digits: int = 3) -> str:
    """Number for people: ``engineering(4700, "Ω")`` is "4.7 kΩ".

    Parameters
    ----------
    value
        In SI units.
    unit
        Unit without prefix; with "" the prefix is glued to the number.
    digits
        Significant digits; zeros at the end are dropped.
    """
    number = float(value)
    if not math.isfinite(number) or number == 0:
        return f"{abs(number) if number == 0 else number:g} {unit}".rstrip()
    rounded = Decimal(f"{number:.{digits - 1}e}")
    power = 3 * (rounded.adjusted() // 3)
    if power not in _PREFIXES:
        return f"{number:.{digits}g} {unit}".rstrip()
    mantissa = f"{rounded.scaleb(-power):f}"
    mantissa = mantissa.rstrip("0").rstrip(".") if "." in mantissa else mantissa
    return f"{mantissa}{' ' if unit else ''}{_PREFIXES[power]}{unit}"
