"""Wishes as lines of a problem file, and a problem with other wishes."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from patchplan.equation.problem import Build, Problem

_HEADER = re.compile(r"(?m)^[ \t]*\[[ \t]*build[ \t]*\][^\n]*\n?")


def build_lines(before: Build, after: Build) -> dict[str, str]:
    """Key -> TOML value of every wish that differs, of those that comparing builds changes."""
    low, high = after.supply
    written: dict[str, tuple[Any, Any, str]] = {
        "supply": (before.supply, after.supply, f"{high:.9g}" if low == -high else f"[{low:.9g}, {high:.9g}]"),
        "reference": (before.reference, after.reference, f"{after.reference:.9g}"),
        "resistors": (before.resistors, after.resistors, json.dumps(after.resistors)),
        "resistor_tolerance": (
            before.resistor_tolerance, after.resistor_tolerance, f'"{100 * after.resistor_tolerance:.9g}%"'
        ),
        "capacitor_tolerance": (
            before.capacitor_tolerance,
            after.capacitor_tolerance,
            f'"{100 * after.capacitor_tolerance:.9g}%"',
        ),
        "op_amp": (before.op_amp, after.op_amp, json.dumps(after.op_amp)),
        "pairs": (before.pairs, after.pairs, "true" if after.pairs else "false"),
        "speed": (
            before.speed, after.speed,
            json.dumps(after.speed) if isinstance(after.speed, str) else f"{after.speed:.9g}",
        ),
        "offsets": (before.offsets, after.offsets, "true" if after.offsets else "false"),
        "forms": (before.forms, after.forms, _table(dict(after.forms))),
    }  # fmt: skip
    return {key: text for key, (old, new, text) in written.items() if old != new}


def with_build(problem: Problem, build: Build) -> Problem:
    """The problem with other wishes, its text changed to say so."""
    return replace(problem, build=build, text=_edited(problem, build_lines(problem.build, build)))


def _table(forms: Mapping[str, str]) -> str:
    return "{ " + ", ".join(f"{json.dumps(name)} = {json.dumps(form)}" for name, form in forms.items()) + " }"


def _edited(problem: Problem, lines: Mapping[str, str]) -> str:
    """The file's text with the lines in place of those of their keys, or at the head of the table ``build``."""
    text, spans = problem.text, problem.spans
    edits = {spans[f"build.{key}"]: value for key, value in lines.items() if f"build.{key}" in spans}
    new = [f"{key} = {value}" for key, value in lines.items() if f"build.{key}" not in spans]
    start = spans["build"][0] if "build" in spans else len(text)
    inline = text[start : start + 1] == "{"
    if inline and new:
        edits[start + 1, start + 1] = " " + ", ".join(new) + ","
    for (start, end), value in sorted(edits.items(), reverse=True):
        text = text[:start] + value + text[end:]
    header = _HEADER.search(text)
    if not new or inline:
        return text
    if header:
        return text[: header.end()].rstrip("\n") + "\n" + "\n".join(new) + "\n" + text[header.end() :]
    if "build" in spans:
        return "".join(f"build.{line}\n" for line in new) + text
    return text.rstrip("\n") + "\n\n[build]\n" + "\n".join(new) + "\n"
