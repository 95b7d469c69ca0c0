"""What the file says of signals: inputs, start values, ranges, terminals, and what is watched."""

from __future__ import annotations

import re
from collections.abc import Callable, Collection, Iterator
from fractions import Fraction
from typing import Any, TypeVar

from patchplan.equation.constants import names_of
from patchplan.equation.problem import Input, Terminal, Watch
from patchplan.equation.reading import Reading, kind_of, nearest
from patchplan.equation.recordings import read_recording
from patchplan.equation.tree import Node, Number
from patchplan.quantity import shown

Given = TypeVar("Given")

_WATCH = re.compile(r"\s*([+-]?)\s*([A-Za-z_][A-Za-z0-9_]*)('*)\s*")


def read_inputs(reading: Reading, duration: Fraction | None) -> dict[str, Input]:
    """The ``[inputs]`` table in file order."""
    inputs: dict[str, Input] = {}
    for name, given in reading.table("inputs", reading.data.get("inputs", {})).items():
        key = f"inputs.{name}"
        if not reading.name(key, name):
            continue
        if name in reading.values or name in reading.broken:
            reading.key_fault(key, f'"{name}" is a parameter already.', "Give the input another name.")
        read = _input(reading, key, name, given, duration)
        if read is not None:
            inputs[name] = read
    return inputs


def _input(reading: Reading, key: str, name: str, given: Any, duration: Fraction | None) -> Input | None:
    if isinstance(given, dict):
        if "within" in given:
            reading.known_keys(key, given, ("within",))
            within = reading.pair(f"{key}.within", given["within"], reading.constant)
            return Input(name, within=within) if within else None
        reading.known_keys(key, given, ("file", "time", "value", "within"))
        recording = read_recording(reading, key, given, duration)
        return Input(name, recording=recording) if recording else None
    if isinstance(given, str):
        tree = reading.expression(key, given)
        return Input(name, tree=tree) if tree is not None and _in_time(reading, key, tree) else None
    number = reading.plain(key, given, "a formula in t, a recording, or { within = [low, high] }")
    return None if number is None else Input(name, tree=Number(number))


def _in_time(reading: Reading, key: str, tree: Node) -> bool:
    """Whether an input's formula holds only t, pi and parameters."""
    allowed = {"t", "pi"} | reading.values.keys() | reading.broken
    wrong = [name for name in names_of(tree) if name.primes or name.name not in allowed]
    for name in wrong:
        reading.fault(
            key, f'"{name.name + name.primes * chr(39)}" is neither t nor a parameter.',
            nearest(name.name, sorted(allowed - {"t", "pi"}), "An input is a formula in t and parameters alone."),
            (name.origin.start, name.origin.end) if name.origin else None,
        )  # fmt: skip
    return not wrong


def read_start(reading: Reading, signals: Collection[str] | None) -> dict[str, Fraction]:
    """The ``[start]`` table: exact values by signal with primes."""
    return _by_signal(reading, "start", signals, reading.constant)


def read_ranges(reading: Reading, signals: Collection[str] | None) -> dict[str, tuple[Fraction, Fraction]]:
    """The ``[ranges]`` table: [low, high] by signal with primes."""
    return _by_signal(reading, "ranges", signals, lambda key, value: reading.pair(key, value, reading.constant))


def read_terminals(reading: Reading, signals: Collection[str] | None) -> dict[str, Terminal]:
    """The ``[terminals]`` table by signal with primes."""
    return _by_signal(reading, "terminals", signals, lambda key, value: _terminal(reading, key, value))


def _by_signal(
    reading: Reading, table: str, signals: Collection[str] | None, read: Callable[[str, Any], Given | None]
) -> dict[str, Given]:
    found: dict[str, Given] = {}
    for name, given in reading.table(table, reading.data.get(table, {})).items():
        key = f"{table}.{name}"
        if not reading.name(key, name, primes=True):
            continue
        if signals is not None and name.rstrip("'") not in signals:
            reading.key_fault(
                key, f"No equation holds a signal {shown(name)}.", nearest(name.rstrip("'"), sorted(signals))
            )
        value = read(key, given)
        if value is not None:
            found[name] = value
    return found


def _terminal(reading: Reading, key: str, given: Any) -> Terminal | None:
    table = reading.table(key, given)
    reading.known_keys(key, table, ("volts_per_unit", "offset"))
    if "volts_per_unit" not in table:
        if isinstance(given, dict):
            reading.fault(key, "This terminal has no volts_per_unit.", "Write { volts_per_unit = 1.0 }.")
        return None
    volts = reading.constant(f"{key}.volts_per_unit", table["volts_per_unit"])
    offset = reading.constant(f"{key}.offset", table.get("offset", 0))
    if volts == 0:
        reading.fault(f"{key}.volts_per_unit", "The volts per unit are zero.", "Give a number other than 0.")
    return None if volts is None or offset is None else Terminal(volts, offset)


def read_watch(reading: Reading, signals: Collection[str] | None) -> tuple[Watch, ...]:
    """The watched signals; empty where the file does not say."""
    given = reading.data.get("watch", [])
    if not isinstance(given, list):
        reading.fault("watch", f"watch is {kind_of(given)}.", 'Write a list: watch = ["x", "y"].')
        return ()
    watched: dict[str, Watch] = {}
    for index, watch in _watched(reading, given, signals):
        if watch.signal in watched:
            reading.fault(f"watch[{index}]", f'"{watch.signal}" is watched twice.', "Remove one of the two.")
        watched[watch.signal] = watch
    return tuple(watched.values())


def _watched(reading: Reading, given: list[Any], signals: Collection[str] | None) -> Iterator[tuple[int, Watch]]:
    for index, item in enumerate(given):
        key = f"watch[{index}]"
        text = reading.string(key, item, "the signal's name")
        if text is None:
            continue
        match = _WATCH.fullmatch(text)
        if match is None:
            reading.fault(key, f"{shown(text)} is no signal.", 'Write a name, its prime marks, + or - before: "-z".')
            continue
        sign, name, primes = match.groups()
        if signals is not None and name not in signals:
            reading.fault(
                key, f"No equation holds a signal {shown(name + primes)}.", nearest(name, sorted(signals)),
                (match.start(2), match.end(3)),
            )  # fmt: skip
        yield index, Watch(name, len(primes), {"+": 1, "-": -1}.get(sign, 0))
