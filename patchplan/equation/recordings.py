"""Recordings: CSV files beside the problem file, read with suspicion."""

from __future__ import annotations

import csv
import math
import stat
from collections.abc import Iterator, Mapping
from fractions import Fraction
from pathlib import Path
from typing import Any

from patchplan.equation.problem import Recording
from patchplan.equation.reading import Reading, nearest
from patchplan.quantity import shown

MAX_BYTES = 64 * 2**20


class _RowError(Exception):
    """What is wrong with the file, and what mends it."""


def read_recording(reading: Reading, key: str, given: Mapping[str, Any], duration: Fraction | None) -> Recording | None:
    """The recording that an input's table names; None with faults noted."""
    texts = {}
    for part, wanted in (("file", "the file's name"), ("time", "the time column"), ("value", "the value column")):
        if part not in given:
            reading.fault(key, f'A recording needs "{part}".', f'Write {part} = "{wanted}".')
        else:
            texts[part] = reading.string(f"{key}.{part}", given[part], wanted)
    if len(texts) < 3 or any(text is None for text in texts.values()):
        return None
    file, time, value = (str(texts[part]) for part in ("file", "time", "value"))
    path = safe_path(reading, f"{key}.file", file)
    if path is None:
        return None
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            rows = _rows(csv.reader(stream, strict=True))
            columns = _columns(reading, key, next(rows, (1, []))[1], time, value)
            if columns is None:
                return None
            recording = _recording(file, rows, columns)
            _check_cover(recording, duration)
    except UnicodeDecodeError:
        reading.fault(f"{key}.file", f"{shown(file)} is not UTF-8 text.", "Save it as CSV in UTF-8.")
    except (OSError, csv.Error) as error:
        reading.fault(f"{key}.file", f"{shown(file)} cannot be read: {error}.", "Save it as CSV with commas.")
    except _RowError as error:
        found, remedy = error.args
        reading.fault(f"{key}.file", f"{shown(file)}: {found}", remedy)
    else:
        return recording
    return None


def safe_path(reading: Reading, key: str, file: str) -> Path | None:
    """Path of a regular file under the problem file's folder; None with the fault noted.

    With ``reading.trust_paths`` it may lie anywhere.
    """
    try:
        folder = reading.folder.resolve()
        path = (folder / file).resolve()
        state = path.stat() if path.is_relative_to(folder) or reading.trust_paths else None
    except (OSError, ValueError, RuntimeError):
        reading.fault(key, f"There is no file {shown(file)}.", "Put it beside the problem file.")
        return None
    if state is None:
        reading.fault(
            key, f"{shown(file)} lies outside the problem file's folder.",
            "Copy it beside the problem file, or allow it with --trust-paths.",
        )  # fmt: skip
        return None
    if not stat.S_ISREG(state.st_mode):
        reading.fault(key, f"{shown(file)} is no regular file.", "Name a CSV file.")
        return None
    if state.st_size > MAX_BYTES:
        reading.fault(key, f"{shown(file)} is larger than {MAX_BYTES // 2**20} MB.", "Thin out its rows.")
        return None
    return path


def _rows(reader: Any) -> Iterator[tuple[int, list[str]]]:
    """Line number and cells of every row that is not blank."""
    for row in reader:
        if any(cell.strip() for cell in row):
            yield reader.line_num, row


def _columns(reading: Reading, key: str, head: list[str], time: str, value: str) -> tuple[int, int] | None:
    if not head:
        raise _RowError("it is empty.", "Write a line of column titles, and two rows or more below it.")
    titles = [cell.strip() for cell in head]
    if len(titles) == 1 and time != titles[0]:
        for mark, name in ((";", "semicolons"), ("\t", "tabs")):
            if mark in head[0]:
                raise _RowError(f"its columns are parted by {name}.", "Save it as CSV with commas and decimal points.")
    for part, title in (("time", time), ("value", value)):
        if title not in titles:
            reading.fault(f"{key}.{part}", f"The recording has no column {shown(title)}.", nearest(title, titles[:20]))
    return (titles.index(time), titles.index(value)) if {time, value} <= set(titles) else None


def _recording(file: str, rows: Iterator[tuple[int, list[str]]], columns: tuple[int, int]) -> Recording:
    times: list[float] = []
    values: list[float] = []
    for line, row in rows:
        time, value = (_cell(row, column, line) for column in columns)
        if times and time == times[-1]:
            later = f"{time + (1e-6 * abs(time) or 1e-6):.9g}"
            raise _RowError(
                f"in line {line} the time {time:g} stands a second time.",
                f"Let times rise row by row; a step is two rows a millionth apart, here {time:.9g} and {later}.",
            )
        if times and time < times[-1]:
            raise _RowError(f"in line {line} the time {time:g} follows {times[-1]:g}.", "Let times rise row by row.")
        times.append(time)
        values.append(value)
    if len(times) < 2:
        raise _RowError(f"it has {len(times)} row{'s' * (len(times) != 1)} of numbers.", "Give two rows or more.")
    return Recording(file, tuple(times), tuple(values))


def _cell(row: list[str], column: int, line: int) -> float:
    text = row[column].strip() if column < len(row) else ""
    try:
        number = float(text)
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        raise _RowError(f"in line {line} {shown(text)} is no finite number.", "Write a number with a decimal point.")
    return number


def _check_cover(recording: Recording, duration: Fraction | None) -> None:
    first, last = recording.times[0], recording.times[-1]
    if duration is not None and (first > 0 or last < float(duration)):
        raise _RowError(
            f"it runs from {first:g} to {last:g}, the problem from 0 to {float(duration):g}.",
            "Record the whole run, or shorten the duration.",
        )
