"""What every part of the reader shares: the list of faults, and single values with their checks."""

from __future__ import annotations

import re
from collections.abc import Callable, Collection, Iterable, Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from fractions import Fraction
from pathlib import Path
from typing import Any, TypeVar

from patchplan.equation.constants import constant_value, names_of
from patchplan.equation.spans import Layout
from patchplan.equation.syntax import parse_expression
from patchplan.equation.tree import FUNCTIONS, Node
from patchplan.errors import Fault, ProblemFaults
from patchplan.quantity import NUMBER, SUFFIXES, UNIT_PREFIXES, parse_quantity, shown, unit_prefix

Given = TypeVar("Given")

#: A file with more faults is no problem file; reading it on would only cost time.
MAX_FAULTS = 500
_LONGEST_NAME, _MOST_NAMES = 60, 300

SIGNAL = re.compile(r"([A-Za-z_][A-Za-z0-9_]*)('*)")


class TooManyFaultsError(Exception):
    """The list of faults is full."""


@dataclass
class Reading:
    """State of one reading.

    Attributes
    ----------
    data
        The TOML document; decimal numbers are Fractions, a float is a number that is not finite or beyond all use.
    names
        All names of the file, for suffix letters and near misses.
    values
        Values of the parameters, once they are read.
    """

    text: str
    file: str
    folder: Path
    layout: Layout
    data: dict[str, Any]
    trust_paths: bool = False
    names: frozenset[str] = frozenset()
    values: dict[str, Fraction] = field(default_factory=dict)
    #: Parameters at fault already: what uses them is not reported again.
    broken: set[str] = field(default_factory=set)
    faults: list[Fault] = field(default_factory=list)

    def note(self, fault: Fault) -> None:
        """Note a fault; after very many the reading ends."""
        self.faults.append(fault)
        if len(self.faults) >= MAX_FAULTS:
            raise TooManyFaultsError

    def fault(self, key: str, found: str, remedy: str, span: tuple[int, int] | None = None) -> None:
        """Note a fault of the value at `key`."""
        self.note(Fault(found, remedy, key, span))

    def key_fault(self, key: str, found: str, remedy: str) -> None:
        """Note a fault of the key itself."""
        place = self.layout.keys.get(key)
        self.note(Fault(found, remedy, "" if place else key, place))

    def attempt(self, work: Callable[[], Given]) -> Given | None:
        """Result of `work`, or None with its faults noted."""
        try:
            return work()
        except ProblemFaults as error:
            for fault in error.faults:
                self.note(fault)
            return None

    def table(self, key: str, value: Any) -> dict[str, Any]:
        """A table, empty with a fault where the value is none."""
        if isinstance(value, dict):
            return value
        self.fault(key, f"{key} is {kind_of(value)}.", f"Write it as a table: [{key}].")
        return {}

    def known_keys(self, prefix: str, table: Mapping[str, Any], known: Collection[str]) -> None:
        """Note every key that is not known, with the nearest that is."""
        for key in table:
            if key not in known:
                dotted = f"{prefix}.{key}" if prefix else key
                self.key_fault(dotted, f"Unknown key {shown(key)}.", nearest(key, known))

    def name(self, key: str, name: str, *, primes: bool = False) -> bool:
        """Whether a key may name a signal; a fault where not."""
        match = SIGNAL.fullmatch(name)
        if match is None or (match[2] and not primes):
            marks = ", with prime marks after it" if primes else " without prime marks"
            self.key_fault(
                key, f"{shown(name)} is no name.", f"Use ASCII letters, digits and _, a letter first{marks}."
            )
            return False
        if match[1] in FUNCTIONS:
            self.key_fault(key, f'"{match[1]}" is a function; this name shadows it.', "Choose another name.")
            return False
        if match[1] in ("t", "pi"):
            what = "the time" if match[1] == "t" else "the number 3.14159..."
            self.key_fault(key, f'"{match[1]}" stands for {what}.', "Choose another name.")
            return False
        return True

    def expression(self, key: str, text: str) -> Node | None:
        """Tree of a formula."""
        return self.attempt(lambda: parse_expression(text, key, names=self.names))

    def constant(self, key: str, value: Any) -> Fraction | None:
        """Exact value of a number, or of a formula of numbers, pi and parameters."""
        read = self.number_or_tree(key, value)
        if read is None or isinstance(read, tuple):
            return read[0] if read else None
        return self.evaluated(read)

    def number_or_tree(self, key: str, value: Any) -> tuple[Fraction, str] | Node | None:
        """A number with its unit, or the tree of a formula."""
        if isinstance(value, str):
            read = self._number_text(key, value)
            if read is None:
                return self.expression(key, value)
            return read if self.whole_unit(key, read[1], value) else None
        number = self.plain(key, value, "a number or a formula of numbers and parameters")
        return None if number is None else (number, "")

    def evaluated(self, tree: Node) -> Fraction | None:
        """Value of a formula of parameters; undefined names are all noted."""
        bad = False
        for name in names_of(tree):
            if name.name in self.broken:
                bad = True
            elif name.primes or (name.name not in self.values and name.name != "pi"):
                bad = True
                place = name.origin
                written = name.name + "'" * name.primes
                self.fault(
                    place.key if place else "", f'"{written}" is no parameter of this file.',
                    nearest(name.name, self.values, "Use numbers, pi and names of [parameters]."),
                    (place.start, place.end) if place else None,
                )  # fmt: skip
        return None if bad else self.attempt(lambda: constant_value(tree, self.values))

    def _number_text(self, key: str, text: str) -> tuple[Fraction, str] | None:
        try:
            value, unit = parse_quantity(text)
        except ValueError:
            return None
        if not unit.isprintable():
            return None
        # Inputs and signals cannot stand in a value, so a letter of theirs is a suffix or a unit all the same.
        parameters = self.data.get("parameters")
        names = parameters if isinstance(parameters, dict) else {}
        letter = re.search(r"([A-Za-z])\s*$", text)
        glued = letter is not None and not unit and letter[1] in names
        if unit in names:
            self.fault(
                key, f'In {shown(text)} "{unit}" is a name of this file, and a unit too.',
                f"Write * for a product; a unit of this spelling stands in unit = {shown(unit)}.",
            )  # fmt: skip
        return None if glued else (value, unit)

    def whole_unit(self, key: str, unit: str, text: str = "") -> bool:
        """Whether a unit carries no prefix, which would ask for a conversion; a fault where it does.

        Parameters
        ----------
        text
            The text that number and unit stand in, where they stand together.
        """
        found = unit_prefix(unit, (str(self.data.get("time_unit", "s")),))
        if found is None:
            return True
        prefix, symbol = found
        number = re.fullmatch(rf"\s*([+-]?{NUMBER.pattern})\s.*", text)
        remedy = "Write the unit without prefixes, and the number that goes with it."
        if unit == prefix + symbol and number and "e" not in number[1].lower():
            letter = "u" if UNIT_PREFIXES[prefix] == -6 else prefix
            short = f'"{number[1]}{letter} {symbol}" or ' if letter in SUFFIXES else ""
            remedy = f'Write {short}"{number[1]}e{UNIT_PREFIXES[prefix]} {symbol}".'
        self.fault(
            key, f"not built in this version: the prefix of a unit is not converted, here {shown(unit)}.", remedy
        )
        return False

    def plain(self, key: str, value: Any, wanted: str) -> Fraction | None:
        """A number as it stands in the file, no text."""
        if isinstance(value, float) or (isinstance(value, int) and abs(value) > 10**100):
            self.fault(key, "This is no finite number of usual size.", f"Write {wanted}.")
            return None
        if isinstance(value, bool) or not isinstance(value, int | Fraction):
            self.fault(key, f"This is {kind_of(value)}.", f"Write {wanted}.")
            return None
        return Fraction(value)

    def quantity(self, key: str, value: Any, wanted: str, units: Collection[str] = ()) -> Fraction | None:
        """A number or a number in text with suffix or percent sign, and one of `units` after a blank."""
        if not isinstance(value, str):
            return self.plain(key, value, wanted)
        try:
            number, unit = parse_quantity(value)
        except ValueError as error:
            self.fault(key, str(error), f"Write {wanted}.")
            return None
        if not self.whole_unit(key, unit, value):
            return None
        if unit and unit not in units:
            self.fault(key, f'The unit "{unit}" is not understood here.', f"Write {wanted}, a suffix glued to it.")
            return None
        return number

    def tolerance(self, key: str, value: Any) -> float | None:
        """A relative tolerance, "1%" or 0.01."""
        number = self.quantity(key, value, 'a share such as "1%" or 0.01')
        if number is None:
            return None
        if not 0 <= number <= Fraction(1, 2):
            self.fault(key, "A tolerance lies from 0 to 50 %.", 'Write a share such as "1%" or 0.01.')
            return None
        return float(number)

    def pair(
        self, key: str, value: Any, read: Callable[[str, Any], Fraction | None]
    ) -> tuple[Fraction, Fraction] | None:
        """Two rising numbers [low, high]."""
        if not isinstance(value, list) or len(value) != 2:
            self.fault(key, f"This is {kind_of(value)}.", "Write two values: [low, high].")
            return None
        low, high = read(f"{key}[0]", value[0]), read(f"{key}[1]", value[1])
        if low is None or high is None:
            return None
        if low >= high:
            self.fault(key, "The first value is not below the second.", "Write [low, high].")
            return None
        return low, high

    def string(self, key: str, value: Any, wanted: str) -> str | None:
        """A string of one line."""
        if isinstance(value, str):
            # A line break in a title or a name would write lines of its own into the netlist.
            if not value.isprintable():
                self.fault(key, "The text holds a line break or a control character.", "Write it on one line.")
                return None
            return value
        self.fault(key, f"This is {kind_of(value)}.", f"Write {wanted} in quotes.")
        return None


def kind_of(value: Any) -> str:
    """What a TOML value is, in words."""
    kinds = {bool: "true or false", str: "text", dict: "a table", int: "a number", Fraction: "a number"}
    if isinstance(value, list):
        return f"a list of {len(value)}" if value else "an empty list"
    return kinds.get(type(value), "no finite number" if isinstance(value, float) else "a date or time")


def nearest(word: str, known: Iterable[str], otherwise: str = "") -> str:
    """Remedy that names the nearest known word, else `otherwise` or all of them."""
    listed = [name for name in known if len(name) <= _LONGEST_NAME][:_MOST_NAMES]
    near = get_close_matches(word[:_LONGEST_NAME], listed, 1) or [k for k in listed if k.lower() == word.lower()]
    if near:
        return f'Did you mean "{near[0]}"?'
    return otherwise or (f"Known here: {', '.join(listed[:30])}." if listed else "There is none to name here.")
