"""Which forms of linear blocks deserve a straight run: weighed by spread of parts and number of stages."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import replace
from math import sqrt

import numpy as np

from patchplan.equation.problem import Build, Problem
from patchplan.equation.system import System
from patchplan.form.blocks import Block, find_blocks
from patchplan.form.offsets import find_form
from patchplan.form.realise import AS_WRITTEN, FORMS, realise
from patchplan.form.rewrite import with_forms
from patchplan.horizon import within_horizon
from patchplan.patch.build import build_patch
from patchplan.patch.records import Patch
from patchplan.ranges import find_ranges
from patchplan.reach.records import Reach
from patchplan.reach.reference import find_reach
from patchplan.reach.retold import retold
from patchplan.report.records import Considered, Plan
from patchplan.sensitivity import Sensitivity, find_sensitivity

#: Straight runs of the forms that look best; none of a form that costs so many times what the best does.
RUNS, TOO_DEAR = 2, 1.3
#: Blocks whose forms are weighed, and the largest System in which they are: each form takes a patch and a sensitivity.
MOST_BLOCKS, MOST_STATES = 4, 120
#: The states of the file mean something to whoever wrote it and can be probed on its board: another form has to be
#: better by this factor (common practice, no source).
STRANGE = 1.25
#: Nodes of the search for signs in a patch that is only counted.
_SIGN_NODES = 1

_LEFT = f"Not weighed: there are more than {MOST_BLOCKS} blocks, or more than {MOST_STATES} states."

Forms = tuple[tuple[str, str], ...]


def consider(problem: Problem, system: System) -> tuple[Considered, ...]:
    """All forms of all blocks of a problem, one block at a time, the others as written.

    Empty where no block has a choice: nothing is solved then.
    """
    blocks = find_blocks(system).blocks
    if not blocks:
        return ()
    most = MOST_BLOCKS if len(system.states) <= MOST_STATES else 0
    left = [Considered(b.name, b.order, AS_WRITTEN, reason=_LEFT) for b in blocks[most:]]
    reach = find_reach(system, problem.ranges, problem.build) if most else None
    weighed = [_weighed(problem, system, reach, b, form) for b in blocks[:most] for form in FORMS if reach]
    return (*weighed, *left)


def _weighed(problem: Problem, system: System, reach: Reach, block: Block, name: str) -> Considered:
    row = Considered(block.name, block.order, name)
    made = realise(block, name) if name != AS_WRITTEN else None
    if isinstance(made, str):
        return replace(row, reason=made)
    written = with_forms(system, {block.name: name})
    here = retold(reach, written.extended)
    form = find_form(written.system, here, problem.terminals, offsets=False, sums=written.sums)
    patch = build_patch(form, hold=problem.build.run != "free", node_limit=_SIGN_NODES)
    sensitivity = find_sensitivity(form, patch, find_ranges(patch, form, here))
    spread = part_spread(within_horizon(sensitivity, linear=system.is_linear), patch, problem.build)
    wires = sum(len(s.wires) for s in patch.stages)
    stages = sum(s.kind not in ("reference", "source") for s in patch.stages)
    return replace(row, stages=stages, wires=wires, tolerance_percent=100 * spread)


def handicap(run: Plan) -> float:
    """What error and spread of a plan are multiplied by to be compared with those in other forms: see `shortlist`."""
    size = sum(1 + len(s.wires) for s in run.patch.stages if s.kind not in ("reference", "source"))
    return size * (STRANGE if any(form != AS_WRITTEN for _, form in run.choices["blocks"]) else 1.0)


def part_spread(sensitivity: Sensitivity, patch: Patch, build: Build) -> float:
    """Standard deviation of the watched signals by tolerances of parts, largest over time, as part of the error base.

    Every wire has a resistor, every integrator a capacitor and every summer a feedback resistor that moves all its
    wires; a tolerance t is uniform, sigma = t / sqrt(3). Offsets depend on scales and are left to the straight run.
    """
    resistor, capacitor = build.resistor_tolerance / sqrt(3), build.capacitor_tolerance / sqrt(3)
    place = {key: i for i, key in enumerate(sensitivity.wires)}
    total = np.zeros(sensitivity.coefficient.shape[::2])
    for stage in patch.stages:
        if stage.kind in ("integrator", "summer", "inverter"):
            own = sensitivity.coefficient[:, [place[stage.name, i] for i in range(len(stage.wires))
                                              if (stage.name, i) in place]]  # fmt: skip
            common = capacitor if stage.kind == "integrator" else resistor
            total += resistor**2 * (own**2).sum(axis=1) + common**2 * own.sum(axis=1) ** 2
    return float(np.sqrt(total.max(initial=0.0)))


def shortlist(considered: Iterable[Considered]) -> tuple[Forms, ...]:
    """What to run: each block's best form, then the one change that costs least; () where nothing is to choose.

    What a form costs is its spread times the number of its stages and wires: a board of a third more of these has to
    be better by a third. Forms other than that of the file count :data:`STRANGE` times.
    """
    ranked: dict[str, list[Considered]] = {}
    for row in considered:
        if row.tolerance_percent is not None:
            ranked.setdefault(row.block, []).append(row)
    for rows in ranked.values():
        rows.sort(key=_cost)
    best = {name: rows[0].form for name, rows in ranked.items()}
    losses = [
        (_cost(row) / (_cost(rows[0]) or 1.0), name, row.form) for name, rows in ranked.items() for row in rows[1:]
    ]
    close = sorted(loss for loss in losses if loss[0] < TOO_DEAR)[: RUNS - 1]
    runs = [best, *({**best, name: form} for _, name, form in close)]
    return tuple(tuple(run.items()) for run in runs)


def as_written(considered: Iterable[Considered]) -> Forms:
    """All blocks that were weighed in the form that their equations state."""
    return tuple((row.block, AS_WRITTEN) for row in considered if row.form == AS_WRITTEN and not row.reason)


def _cost(row: Considered) -> float:
    return (row.tolerance_percent or 0.0) * (row.stages + row.wires) * (1.0 if row.form == AS_WRITTEN else STRANGE)


def told(considered: Iterable[Considered], runs: Iterable[Plan], found: Plan) -> tuple[Considered, ...]:
    """The rows with what the straight runs gave, and those chosen marked."""
    known = dict(_figures(runs))
    forms: Mapping[str, str] = dict(found.choices["blocks"])
    rows = []
    for row in considered:
        error, spread = known.get((row.block, row.form), (None, None))
        chosen = forms.get(row.block, AS_WRITTEN) == row.form
        rows.append(replace(row, chosen=chosen, error_percent=error, spread_percent=spread))
    return tuple(rows)


def _figures(runs: Iterable[Plan]) -> Iterator[tuple[tuple[str, str], tuple[float, float]]]:
    for run in runs:
        if run.verdict.verdict != "not_buildable":
            figures = run.verdict.max_error_percent, run.verdict.spread_percent
            yield from (((name, form), figures) for name, form in run.choices["blocks"])
