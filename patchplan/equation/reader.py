"""The problem file: TOML text to a :class:`Problem`, with every fault of the file told at once."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Collection, Mapping
from contextlib import suppress
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any, NoReturn

from patchplan.equation.constants import names_of
from patchplan.equation.faults import in_file_order, render
from patchplan.equation.parameters import read_parameters
from patchplan.equation.problem import TIME_UNITS, Equation, Problem
from patchplan.equation.reading import Reading, TooManyFaultsError, kind_of
from patchplan.equation.signals import read_inputs, read_ranges, read_start, read_terminals, read_watch
from patchplan.equation.spans import Layout, scan
from patchplan.equation.syntax import parse_equation
from patchplan.equation.wishes import read_build
from patchplan.errors import Fault, ProblemFaults
from patchplan.quantity import exact_number, parse_quantity, shown

MAX_BYTES = 500_000
MAX_EQUATIONS = 2000

_KEYS = (
    "title", "equations", "duration", "time_unit", "watch",
    "parameters", "start", "inputs", "ranges", "terminals", "build", "part",
)  # fmt: skip
_MATHEMATICS = ("equations", "parameters.", "inputs.", "start.")
# Time and memory that a dotted key costs grow with the square of its parts.
_LONG_KEY = re.compile(r"(?<![\w-])(?:[\w-]++[ \t]*+\.[ \t]*+){16}")
_STRING_OR_COMMENT = re.compile(
    r'''"""(?:\\.|[^\\])*?"""|\'{3}.*?\'{3}|"(?:\\.|[^"\\\n])*"|\'[^\'\n]*\'|#[^\n]*''', re.DOTALL
)
_WORD = re.compile(r"(?<![\w.])[A-Za-z_][A-Za-z0-9_]*")


def read_problem(
    source: str | Path, *, part_names: Mapping[str, Collection[str]] | None = None, trust_paths: bool = False
) -> Problem:
    """The problem of a file, or of a text of several lines.

    Parameters
    ----------
    source
        A path, or a text with at least one line break; a text's recordings are sought in the working folder.
    part_names
        Names of the catalogue by ``"op_amp"`` and ``"multiplier"``; None leaves part names unchecked.
    trust_paths
        Whether recordings may lie outside the problem file's folder.

    Raises
    ------
    ProblemFaults
        With all faults of the file, in file order, and their text in ``rendered``.
    """
    text, file, folder = _loaded(source)
    data, layout = _document(text, file)
    reading = Reading(text, file, folder, layout, data, trust_paths)
    problem = None
    with suppress(TooManyFaultsError):
        problem = _problem(reading, part_names)
    if problem is None or reading.faults:
        faults = in_file_order(reading.faults, text, layout.values)
        raise ProblemFaults(faults, render(faults, text=text, file=file, spans=layout.values))
    return problem


def _loaded(source: str | Path) -> tuple[str, str, Path]:
    """Text, name for messages and folder."""
    if isinstance(source, str) and "\n" in source:
        raw, file, folder = source.encode("utf-8", "surrogatepass"), "problem.toml", Path()
    else:
        file, folder = str(source), Path(source).parent
        try:
            path = Path(source)
            if path.is_dir():
                _give_up(Fault("This is a folder.", "Name the problem file in it."), file)
            if not path.is_file():
                raise FileNotFoundError
            with path.open("rb") as stream:
                raw = stream.read(MAX_BYTES + 1)
        except (OSError, ValueError):
            _give_up(Fault("There is no such file that can be read.", "Check the name."), file)
    if len(raw) > MAX_BYTES:
        _give_up(Fault(f"The problem file is larger than {MAX_BYTES} bytes.", "Put long data in a recording."), file)
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        _give_up(Fault(f"The file is not UTF-8 text (line {line}).", "Save it in UTF-8."), file)
    return text.replace("\r\n", "\n"), file, folder


def _give_up(fault: Fault, file: str, text: str = "") -> NoReturn:
    raise ProblemFaults([fault], render([fault], text=text, file=file, spans={}))


def _document(text: str, file: str) -> tuple[dict[str, Any], Layout]:
    if _LONG_KEY.search(_STRING_OR_COMMENT.sub("_", text)):
        _give_up(Fault("A key has over 16 parts joined by dots.", "Write short keys."), file)
    try:
        return tomllib.loads(text, parse_float=_number), scan(text)
    except RecursionError:
        _give_up(Fault("Lists or tables are nested too deep.", "Write them flat."), file)
    except ValueError as error:
        _give_up(_toml_fault(str(error), text), file, text)


def _number(text: str) -> Fraction | float:
    """Exact decimal number; a float where it is not finite or beyond all use."""
    try:
        return exact_number(text.replace("_", ""))
    except ValueError:
        return float(text)


def _toml_fault(message: str, text: str) -> Fault:
    """The fault of unreadable TOML at the place that its message names."""
    match = re.search(r" \(at line (\d+), column (\d+)\)$", message)
    if match is None:
        at = len(text.rstrip())
        found = message.removesuffix(" (at end of document)")
        found = "A number is far too long" if "integer string" in message else found
        return Fault(f"This is not TOML: {found}.", "Complete or correct this line.", "", (at, at + 1))
    line, column = int(match[1]), int(match[2])
    start = sum(len(row) + 1 for row in text.split("\n")[: line - 1])
    row = text[start:].partition("\n")[0]
    remedy = "Correct this line."
    if re.match(r"\s*\w+'+\s*=", row):
        remedy = 'Put a name with prime marks in quotes: "z\'" = 0.0.'
    elif re.match(r"\s*\w+\s*=\s*[A-Za-z]", row):
        remedy = 'Put text in quotes: name = "text".'
    at = start + column - 1
    return Fault(f"This is not TOML: {message[: match.start()]}.", remedy, "", (at, at + 1))


def _problem(reading: Reading, part_names: Mapping[str, Collection[str]] | None) -> Problem | None:
    """The problem; with faults noted its fields may be incomplete."""
    data = reading.data
    reading.known_keys("", data, _KEYS)
    reading.names = _names(data)
    parameters = read_parameters(reading)
    equations = _equations(reading)
    duration = _duration(reading)
    inputs = read_inputs(reading, duration)
    signals = _signals(reading, equations, inputs.keys() - parameters.keys())
    time_unit = _time_unit(reading)
    sound = not reading.faults
    start = read_start(reading, signals)
    sound_start = not reading.faults
    ranges, terminals = read_ranges(reading, signals), read_terminals(reading, signals)
    watch = read_watch(reading, signals)
    title = reading.string("title", data.get("title", Path(reading.file).stem), "the title")
    build, own_parts = read_build(reading, part_names), _own_parts(reading)
    if duration is None or title is None or time_unit is None:
        return None
    problem = Problem(
        title, tuple(equations), duration, time_unit, watch, parameters, start, inputs, ranges, terminals,
        build, own_parts, reading.text, reading.file, reading.folder, reading.layout.values,
    )  # fmt: skip
    if sound and reading.faults:
        told = _MATHEMATICS if sound_start else _MATHEMATICS[:-1]
        # A start value at fault is still given, which makes its name an unknown.
        given = dict.fromkeys(reading.table("start", data.get("start", {})), Fraction(0)) | start
        reading.faults += _faults_of_equations(replace(problem, start=given), told)
    return problem


def _faults_of_equations(problem: Problem, told: tuple[str, ...]) -> list[Fault]:
    """What the mathematics would find next, where only start values, wishes and the like are at fault so far."""
    from patchplan.equation.explicit import build_system

    try:
        build_system(problem)
    except ProblemFaults as error:
        return [f for f in error.faults if f.key == "start" or f.key.startswith(told)]
    return []


def _signals(reading: Reading, equations: list[Equation], inputs: Collection[str]) -> set[str] | None:
    """Names that start values and the like may use; None where an equation at fault may hold more."""
    if not 0 < len(equations) == len(_listed(reading.data.get("equations"))):
        return None
    names = [name for e in equations for side in (e.left, e.right) for name in names_of(side)]
    # A parameter with a prime mark is an unknown too; what comes later tells of that.
    numbers = (reading.values.keys() | reading.broken) - {name.name for name in names if name.primes}
    return ({name.name for name in names} | set(inputs)) - {"t", "pi"} - numbers


def _listed(value: Any) -> list[Any]:
    return value if isinstance(value, list) else []


def _names(data: Mapping[str, Any]) -> frozenset[str]:
    """Every word that the file may use as a name: keys of tables, and words of the equations."""
    tables = [data.get(table) for table in ("parameters", "inputs")]
    names = {name for table in tables if isinstance(table, dict) for name in table}
    texts = [text for text in _listed(data.get("equations")) if isinstance(text, str)]
    return frozenset(names.union(*(_WORD.findall(text) for text in texts)))


def _equations(reading: Reading) -> list[Equation]:
    given = reading.data.get("equations")
    if given is None:
        reading.fault("", "The file has no equations.", 'Write equations = ["x\' = -x"] above the first [table].')
        return []
    if not isinstance(given, list) or not 0 < len(given) <= MAX_EQUATIONS:
        reading.fault("equations", f"equations is {kind_of(given)}.", f"Write a list of 1 to {MAX_EQUATIONS} texts.")
        return []
    made = []
    for index, item in enumerate(given):
        if isinstance(item, str):
            made.append(_equation(reading, item, index))
        else:
            reading.fault(f"equations[{index}]", f"This is {kind_of(item)}.", "Write left side = right side in quotes.")
    return [equation for equation in made if equation is not None]


def _equation(reading: Reading, text: str, index: int) -> Equation | None:
    return reading.attempt(lambda: parse_equation(text, index, names=reading.names))


def _duration(reading: Reading) -> Fraction | None:
    given = reading.data.get("duration")
    if given is None:
        reading.fault("", "The file has no duration.", "Write duration = 10.0 above the first [table].")
        return None
    if isinstance(given, str) and _wrong_unit(reading, given):
        return None
    duration = reading.constant("duration", given)
    if duration is not None and duration <= 0:
        reading.fault("duration", "The duration is not above zero.", "Write the length of the run in problem time.")
        return None
    return duration


def _wrong_unit(reading: Reading, given: str) -> bool:
    try:
        unit = parse_quantity(given)[1]
    except ValueError:
        return False
    wanted = reading.data.get("time_unit", "s")
    if not unit or unit == wanted:
        return False
    reading.fault("duration", f"The duration is in {shown(unit)}, the problem's time in {shown(str(wanted))}.",
                  "Use one unit for both.")  # fmt: skip
    return True


def _time_unit(reading: Reading) -> str | None:
    unit = reading.string("time_unit", reading.data.get("time_unit", "s"), "the unit of time")
    if unit is not None and unit not in TIME_UNITS:
        reading.fault("time_unit", f"Unknown unit of time {shown(unit)}.", f"Known: {', '.join(TIME_UNITS)}.")
        return None
    return unit


def _own_parts(reading: Reading) -> dict[str, dict[str, Any]]:
    parts = reading.table("part", reading.data.get("part", {}))
    for name in parts:
        if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9_.+-]*", name):
            reading.key_fault(
                f"part.{name}", f"{shown(name)} is no part name.", "Use letters, digits and - _ + . alone."
            )
    return {name: _floats(reading, f"part.{name}", reading.table(f"part.{name}", part)) for name, part in parts.items()}


def _floats(reading: Reading, key: str, value: Any) -> Any:
    """A TOML value with plain floats, as the parts catalogue reads its own files."""
    if isinstance(value, dict):
        return {name: _floats(reading, f"{key}.{name}", item) for name, item in value.items()}
    if isinstance(value, list):
        return [_floats(reading, f"{key}[{index}]", item) for index, item in enumerate(value)]
    if isinstance(value, str):
        return reading.string(key, value, "text")
    if isinstance(value, float):
        reading.plain(key, value, "a finite number")
    return float(value) if isinstance(value, Fraction) else value
