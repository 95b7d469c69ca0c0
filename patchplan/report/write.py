"""The plan folder: every file of a plan, and putting them in place."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.problem import Problem
from patchplan.report.board import board_of
from patchplan.report.folder import MANIFEST, replace_folder, unused_name
from patchplan.report.page import page
from patchplan.report.pictures import pictures as draw
from patchplan.report.plan_json import plan_data, plan_text, refusal_data
from patchplan.report.records import Plan
from patchplan.report.tables import csv_text, nodes_csv, parts_csv
from patchplan.report.trimming import trimming_data
from patchplan.report.worst import worst_files

Array = NDArray[np.float64]
#: Most numbers in waveforms.csv, about 10 MB.
MOST_NUMBERS = 1_000_000
#: Gives the volts of every net at the start of the run, and the netlist that starts there.
Board = Callable[[Plan], tuple[Mapping[str, float], str]]


def write_plan(plan: Plan, folder: Path, *, pictures: bool = True, board: Board = board_of) -> tuple[str, ...]:
    """Write the plan folder, whole or not at all.

    Parameters
    ----------
    plan
        The plan; one that cannot be built gives plan.json alone.
    pictures
        Whether to draw.

    Returns
    -------
    tuple
        Names of the files written.

    Raises
    ------
    FolderRefused
        See :func:`patchplan.report.folder.replace_folder`.
    """
    files = plan_folder(plan, pictures=pictures, board=board)
    replace_folder(folder, files)
    return tuple(files)


def write_refusal(problem: Problem, reason: str, folder: Path) -> tuple[str, ...]:
    """Write the folder of a problem for which no plan could be begun: plan.json with the verdict alone.

    Raises
    ------
    FolderRefused
        See :func:`patchplan.report.folder.replace_folder`.
    """
    replace_folder(folder, {MANIFEST: plan_text(refusal_data(problem, reason, [MANIFEST])).encode()})
    return (MANIFEST,)


def plan_folder(plan: Plan, *, pictures: bool = True, board: Board = board_of) -> dict[str, bytes]:
    """Content of every file of the folder, by name, plan.json first."""
    circuit = plan.circuit
    if circuit is None or plan.verdict.verdict == "not_buildable":
        return {MANIFEST: plan_text(plan_data(plan, [MANIFEST])).encode()}
    start, netlist = board(plan)
    drawn = draw(plan) if pictures else {}
    sources = source_files(plan)
    texts = {
        "parts.csv": parts_csv(circuit),
        "circuit.cir": netlist,
        "waveforms.csv": waveforms_csv(plan),
        **dict(sources.values()),
        **worst_files(plan),
        **drawn,
    }
    names = [MANIFEST, "report.html", "nodes.csv", *texts]
    copies = problem_files(plan, names)
    names += copies
    data = plan_data(plan, names) | {"trimming": trimming_data(plan)}
    texts |= {
        MANIFEST: plan_text(data),
        "report.html": page(plan, start, drawn, {source: name for source, (name, _) in sources.items()}, names),
        "nodes.csv": nodes_csv(data),
    }
    contents = {name: text.encode() for name, text in texts.items()} | copies
    return {name: contents[name] for name in names}


def problem_files(plan: Plan, taken: list[str]) -> dict[str, bytes]:
    """problem.toml and copies of its recordings and stock files, at the same places beside it.

    One outside the problem's folder, or of a name that the plan needs, is copied under a name of its own.
    """
    files = {"problem.toml": plan.problem.text.encode()}
    recordings = {i.recording.file for i in plan.problem.inputs.values() if i.recording}
    recordings |= {
        s.waveform.recording.file for s in plan.patch.sources.values() if s.waveform and s.waveform.recording
    }
    stocks = (plan.problem.build.resistor_stock, plan.problem.build.capacitor_stock)
    named = dict.fromkeys(sorted(recordings), "recording") | {stock.file: "stock" for stock in stocks if stock}
    for file, kind in named.items():
        name = os.path.normpath(file)
        used = {other.lower() for other in (*taken, *files)}
        if os.path.isabs(name) or name.startswith("..") or name.lower() in used:
            name = unused_name(kind, Path(file).stem, "csv", (*taken, *files))
        files[name] = (plan.problem.folder / file).read_bytes()
    return files


def source_files(plan: Plan) -> dict[str, tuple[str, str]]:
    """Source -> (file name, CSV text) for every waveform that the board takes from outside."""
    files: dict[str, tuple[str, str]] = {}
    parts = plan.circuit.parts if plan.circuit else ()
    for part in parts:
        if part.kind != "source" or plan.circuit is None:
            continue
        meaning = plan.circuit.nodes[part.nets[0]]
        times, values = _waveform(plan, part.model)
        volts = meaning.sign * meaning.volts_per_unit * values + meaning.offset_volts
        name = unused_name("source", part.model, "csv", [taken for taken, _ in files.values()])
        columns = {"circuit_time_s": times * plan.sizing.time_scale, "volts": volts}
        files[part.model] = (name, _columns_csv(columns))
    return files


def _waveform(plan: Plan, name: str) -> tuple[Array, Array]:
    reference = plan.reach.reference
    if name in reference.waveforms:
        return reference.waveforms[name]
    return reference.times, reference.of(name)


def waveforms_csv(plan: Plan) -> str:
    """waveforms.csv: volts of every signal node, and each watched signal by equation and by circuit.

    Where that is more than :data:`MOST_NUMBERS`, every second, third ... row is written, and both rows of jumps.
    """
    verdict, unit = plan.verdict, plan.system.time_unit
    times = verdict.times / plan.sizing.time_scale
    columns = {"circuit_time_s": verdict.times, f"problem_time_{unit}": times}
    columns |= {f"v({node})": volts for node, volts in verdict.volts.items()}
    for curve in verdict.curves:
        columns[f"{curve.name} equation"] = np.interp(times, curve.times, curve.reference)
        columns[f"{curve.name} circuit"] = np.interp(times, curve.times, curve.circuit)
    every = -(-len(times) * len(columns) // MOST_NUMBERS)
    if every > 1:
        jumps = np.flatnonzero(np.diff(times) == 0.0)
        kept = np.unique(np.concatenate((np.arange(0, len(times), every), jumps, jumps + 1, [len(times) - 1])))
        columns = {name: column[kept] for name, column in columns.items()}
    return _columns_csv(columns)


def _columns_csv(columns: Mapping[str, Array]) -> str:
    rows = np.column_stack(list(columns.values()))
    line = ",".join(["%.9g"] * rows.shape[1]) + "\n"
    return csv_text(list(columns), ()) + "".join(line % tuple(row) for row in rows.tolist())
