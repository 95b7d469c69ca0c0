"""The folder of a comparison: options.json, options.csv and options.svg."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from patchplan.compare.records import Comparison, Option, Wish
from patchplan.equation.build_text import build_lines
from patchplan.equation.problem import Build
from patchplan.report.folder import replace_folder
from patchplan.report.options_picture import options_picture
from patchplan.report.options_words import form_name
from patchplan.report.records import Picked
from patchplan.report.tables import csv_text
from patchplan.version import __version__

#: The file that says which files of the folder are ours.
MANIFEST = "options.json"
_COLUMNS = (
    "op_amp", "resistors", "resistor_tolerance_percent", "capacitor_tolerance_percent", "supply_low", "supply_high",
    "reference", "speed", "form", "times_faster", "error_percent", "spread_percent", "error_percent_of_peak",
    "spread_percent_of_peak", "parts", "packages",
    "supply_current", "non_dominated", "cannot_be_built",
)  # fmt: skip


def options_files(
    comparison: Comparison, usual: Build, *, wish: Wish | None = None, picked: Picked | None = None,
    pictures: bool = True,
) -> dict[str, bytes]:  # fmt: skip
    """Content of every file by name; parameters as in ``options_summary``."""
    rows = [_row(option) for option in comparison.options]
    texts = {"options.csv": csv_text(_COLUMNS, [[_cell(row[c]) for c in _COLUMNS] for row in rows])}
    if pictures and any(not o.fault for o in comparison.options):
        option = picked.option if picked else None
        texts["options.svg"] = options_picture(comparison, wish=wish, picked=option)
    data = {
        "contract": 1,
        "title": comparison.title,
        "version": __version__,
        "files": [MANIFEST, *texts],
        "options": [
            {**row, "causes": _causes(o.causes), "spread_causes": _causes(o.spread_causes)}
            for row, o in zip(rows, comparison.options, strict=True)
        ],
        "pick": _pick(comparison, usual, wish, picked) if wish and picked else None,
    }
    texts = {MANIFEST: json.dumps(data, indent=1, ensure_ascii=False, allow_nan=False) + "\n", **texts}
    return {name: text.encode() for name, text in texts.items()}


def write_options(files: dict[str, bytes], folder: Path) -> None:
    """Write the folder, whole or not at all.

    Raises
    ------
    FolderRefused
        See :func:`patchplan.report.folder.replace_folder`.
    """
    replace_folder(folder, files, manifest=MANIFEST)


def _row(option: Option) -> dict[str, Any]:
    build, built = option.build, not option.fault
    figures = {
        "times_faster": option.speed,
        "error_percent": option.error_percent,
        "spread_percent": option.spread_percent,
        "error_percent_of_peak": option.figures[0],
        "spread_percent_of_peak": option.figures[1],
        "parts": option.parts,
        "packages": option.packages,
        "supply_current": option.supply_current,
    }
    return {
        "op_amp": build.op_amp,
        "resistors": build.resistors,
        "resistor_tolerance_percent": _nine(100 * build.resistor_tolerance),
        "capacitor_tolerance_percent": _nine(100 * build.capacitor_tolerance),
        "supply_low": build.supply[0],
        "supply_high": build.supply[1],
        "reference": build.reference,
        "speed": build.speed,
        "form": form_name(build),
        **{key: _nine(value) if built else None for key, value in figures.items()},
        "non_dominated": option.best,
        "cannot_be_built": option.fault,
    }


def _pick(comparison: Comparison, usual: Build, wish: Wish, picked: Picked) -> dict[str, Any]:
    """What was asked for, the row that was picked (from 0, null for none), and what its full check found."""
    at = {id(o): i for i, o in enumerate(comparison.options)}
    checks = [*picked.refuted, *([(picked.option, picked.plan)] if picked.option and picked.plan else [])]
    return {
        "accept_percent": wish.error_percent,
        "accept_spread_percent": wish.spread_percent,
        "option": at[id(picked.option)] if picked.option else None,
        "build": build_lines(usual, picked.option.build) if picked.option else None,
        "checked": [
            {
                "option": at[id(option)],
                "verdict": plan.verdict.verdict,
                "max_error_percent": _nine(plan.verdict.max_error_percent),
                "spread_percent": _nine(plan.verdict.spread_percent),
            }
            for option, plan in checks
        ],
    }


def _causes(causes: Any) -> list[dict[str, Any]]:
    return [{"cause": c.cause, "error_percent": _nine(c.error_percent)} for c in causes]


def _nine(value: float) -> float | int:
    return value if isinstance(value, int) else float(f"{value:.9g}")


def _cell(value: Any) -> Any:
    if value is None:
        return ""
    return "yes" if value is True else "no" if value is False else value
