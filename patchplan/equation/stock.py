"""Stock files: which resistors or capacitors are on hand, as CSV beside the problem file."""

from __future__ import annotations

import csv
import re
from collections.abc import Callable, Collection, Iterator
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import Any, TypeVar

from patchplan.equation.problem import Stock, StockRow
from patchplan.equation.reading import Reading
from patchplan.equation.recordings import safe_path
from patchplan.quantity import parse_quantity, shown

Cell = TypeVar("Cell")

#: Titles of each column, small letters, blanks for ``_`` and ``-``; a unit in brackets behind is taken off first.
TITLES = {
    "value": ("value", "nominal", "nominal value", "marked", "resistance", "capacitance"),
    "count": ("count", "quantity", "qty", "pieces", "number", "on hand"),
    "tolerance": ("tolerance", "tol"),
    "serial": ("serial", "serial number", "serial no", "sn", "s/n"),
    "measured": ("measured", "measured value"),
}
MAX_ROWS = 10_000
MOST_PIECES = 1_000_000
#: A measured value this many times the marked one, or a part of it, is taken for a slip of units.
_SLIP = 2


@dataclass
class _File:
    """One reading of a file: faults are told with its name and line."""

    reading: Reading
    key: str
    name: str
    units: Collection[str]
    columns: dict[str, int] = field(default_factory=dict)
    seen: dict[str, int] = field(default_factory=dict)

    def fault(self, line: int, found: str, remedy: str) -> None:
        place = f"{shown(self.name)}, line {line}" if line else shown(self.name)
        self.reading.fault(self.key, f"{place}: {found}", remedy)


def read_stock(reading: Reading, key: str, file: str, units: Collection[str]) -> Stock | None:
    """The stock that ``file`` lists; None with all its faults noted.

    Parameters
    ----------
    key
        Key of the file's name in the problem file.
    units
        Units that may stand behind a value.
    """
    path = safe_path(reading, key, file)
    if path is None:
        return None
    source = _File(reading, key, file, units)
    before = len(reading.faults)
    try:
        rows = _read(source, path)
    except UnicodeDecodeError:
        source.fault(0, "it is not UTF-8 text.", "Save it as CSV in UTF-8.")
    except (OSError, csv.Error) as error:
        source.fault(0, f"it cannot be read: {error}.", "Save it as CSV with commas.")
    else:
        return Stock(file, rows) if len(reading.faults) == before else None
    return None


def _read(source: _File, path: Path) -> tuple[StockRow, ...]:
    before = len(source.reading.faults)
    with path.open(encoding="utf-8-sig", newline="") as stream:
        reader = csv.reader(stream, strict=True)
        lines = ((reader.line_num, row) for row in reader if any(cell.strip() for cell in row))
        line, head = next(lines, (0, []))
        if not _find_columns(source, line, head):
            return ()
        rows = tuple(row for row in _rows(source, lines) if row is not None)
    if not rows and len(source.reading.faults) == before:
        source.fault(0, "it lists no parts.", "Write one line a value below the titles: 10k,25,1%.")
    return rows


def _find_columns(source: _File, line: int, head: list[str]) -> bool:
    before = len(source.reading.faults)
    if not head:
        source.fault(0, "it is empty.", "Write a line of titles, value,count,tolerance, and a line for each value.")
    elif len(head) == 1 and (mark := re.search(r"[;\t]", head[0])):
        name = "semicolons" if mark[0] == ";" else "tabs"
        source.fault(line, f"the columns are parted by {name}.", "Save it as CSV with commas and decimal points.")
    else:
        for column, title in enumerate(head):
            _place_column(source, line, column, title)
        if "value" not in source.columns:
            source.fault(line, 'there is no column "value".', "Name the column of marked values value.")
        if not {"count", "serial"} & source.columns.keys():
            source.fault(line, 'there is no column "count".', "Name the column with the number of pieces count.")
    return len(source.reading.faults) == before


def _place_column(source: _File, line: int, column: int, title: str) -> None:
    text = re.sub(r"[\s_-]+", " ", title).strip().lower()
    unit = re.search(r"\s*[(\[]([^)\]]*)[)\]]$", text)
    plain = text[: unit.start()] if unit else text
    name = next((name for name, titles in TITLES.items() if plain in titles), None)
    if name is None:
        return  # A column of remarks, shelf places and the like.
    known = {u.lower() for u in source.units} | {"%"}
    if unit and unit[1].strip() not in known:
        source.fault(line, f"the unit of {shown(title.strip())} is not converted.", "Write suffixes: 4.7k, 100n.")
    if name in source.columns:
        source.fault(line, f'there are two columns for "{name}".', "Keep one of them.")
    source.columns[name] = column


def _rows(source: _File, lines: Iterator[tuple[int, list[str]]]) -> Iterator[StockRow | None]:
    for number, (line, row) in enumerate(lines):
        if number >= MAX_ROWS:
            source.fault(line, f"it lists over {MAX_ROWS} lines.", "Put equal parts into one line with their count.")
            return
        cells = {name: row[at].strip() if at < len(row) else "" for name, at in source.columns.items()}
        yield _row(source, line, cells)


def _row(source: _File, line: int, cells: dict[str, str]) -> StockRow | None:
    before = len(source.reading.faults)

    def cell(name: str, read: Callable[[str], Cell]) -> Cell | None:
        try:
            return read(cells[name]) if cells.get(name) else None
        except _CellError as error:
            source.fault(line, *error.args)
            return None

    value = cell("value", lambda text: _value(text, source.units))
    measured = cell("measured", lambda text: _value(text, source.units))
    tolerance, count = cell("tolerance", _tolerance), cell("count", _count)
    serial = cells.get("serial", "")
    if not cells.get("value"):
        source.fault(line, "the value is missing.", "Write a value such as 4.7k.")
    if not serial and not cells.get("count"):
        source.fault(line, "the count is missing.", "Write how many there are.")
    if serial:
        _check_serial(source, line, serial, count)
    elif measured is not None:
        source.fault(line, "a measured part has no serial number.", "Give it one, and write it on the part.")
    if value and measured and not 1 / _SLIP < measured / value < _SLIP:
        source.fault(
            line, f"{shown(cells['measured'])} measured is far from {shown(cells['value'])}.", "Check the suffixes."
        )
    if len(source.reading.faults) > before or value is None:
        return None
    return StockRow(value, 1 if serial else count or 0, tolerance, serial, measured, line)


def _check_serial(source: _File, line: int, serial: str, count: int | None) -> None:
    if not serial.isprintable() or len(serial) > 40:
        source.fault(line, f"{shown(serial)} is no serial number.", "Use up to 40 printable characters.")
    if count not in (None, 1):
        source.fault(line, f"the serial number {shown(serial)} stands for {count} parts.", "Give each part its line.")
    if serial in source.seen:
        source.fault(
            line, f"the serial number {shown(serial)} stands in line {source.seen[serial]} already.",
            "Give each part a number of its own.",
        )  # fmt: skip
    source.seen.setdefault(serial, line)


class _CellError(Exception):
    """What is wrong with a cell, and what mends it."""


def _value(text: str, units: Collection[str]) -> float:
    number, unit = _quantity(text, "Write a value such as 4.7k or 100n.")
    if unit and unit not in units:
        raise _CellError(f'the unit "{unit}" is not understood here.', "Write a suffix glued to the number: 4.7k.")
    if number <= 0:
        raise _CellError(f"{shown(text)} is not above zero.", "Write a value such as 4.7k or 100n.")
    return float(number)


def _tolerance(text: str) -> float:
    number, unit = _quantity(text, 'Write a share such as "1%" or 0.01.')
    if unit or not 0 <= number <= Fraction(1, 2):
        raise _CellError(f"{shown(text)} is no tolerance from 0 to 50 %.", "Write a share such as 1% or 0.01.")
    return float(number)


def _count(text: str) -> int:
    if not re.fullmatch(r"[0-9]{1,9}", text) or int(text) > MOST_PIECES:
        raise _CellError(f"{shown(text)} is no count of pieces.", "Write a whole number.")
    return int(text)


def _quantity(text: str, remedy: str) -> tuple[Any, str]:
    try:
        return parse_quantity(text)
    except ValueError as error:
        raise _CellError(str(error)[:1].lower() + str(error)[1:], remedy) from None
