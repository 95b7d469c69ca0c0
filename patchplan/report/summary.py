"""What the terminal shows of a plan: plain text in 80 columns."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import Any

from patchplan.report import words
from patchplan.report.plan_json import warnings_of
from patchplan.report.ranges_told import ranges_sentence
from patchplan.report.records import Plan
from patchplan.report.style import TERMINAL
from patchplan.report.tables import Table, node_table

WIDTH = 80
#: Stands for the blank before a percent sign while lines are broken, so that a figure keeps its sign.
HELD = "\N{NO-BREAK SPACE}%"
#: Rows of the node table on the terminal; nodes.csv has all.
MOST_NODES = 16


def summary(plan: Plan, folder: Path | None = None, *, colour: bool = False) -> str:
    """Does it work, how fast, made of what, what each node does, where the error comes from, where the files are.

    Parameters
    ----------
    folder
        Where the plan was written, None where it was not.
    colour
        Whether to colour title and verdict for a terminal.
    """
    works = plan.verdict.verdict == "follows"
    told = words.story(plan)
    blocks = [painted(words.printable(plan.problem.title), "title", colour)]
    blocks.append(painted(wrapped(told[0]), "good" if works else "bad", colour))
    blocks += [wrapped(reason) for reason in words.reasons(plan)]
    remedies = words.remedies(plan)
    if remedies:
        blocks.append(wrapped(f"To mend it: {' '.join(remedies)}"))
    if plan.circuit is not None:
        blocks += map(wrapped, (*words.speed(plan), words.made_of(plan), *words.forms(plan), *words.trims(plan)))
        blocks += ["", *table_lines(_first_rows(node_table(plan))), ""]
        blocks += [wrapped(s) for s in (words.largest_error(plan), ranges_sentence(plan)) if s]
    blocks += [wrapped(f"Warning: {warning}") for warning in warnings_of(plan)]
    if folder is not None:
        start = "report.html" if plan.circuit is not None else "plan.json"
        blocks.append(wrapped(f"Written to {folder} (start with {start})"))
    return "\n".join(blocks) + "\n"


def refusal(title: str, reason: str, folder: Path, *, colour: bool = False) -> str:
    """The same for a problem that the parts rule out before anything is planned."""
    blocks = [painted(words.printable(title), "title", colour), painted(wrapped(words.NOT_BUILDABLE), "bad", colour)]
    blocks += [wrapped(reason), wrapped(f"Written to {folder} (start with plan.json)")]
    return "\n".join(blocks) + "\n"


def wrapped(text: str) -> str:
    """A sentence in lines of the page's width, indented."""
    options: dict[str, Any] = {"break_on_hyphens": False, "break_long_words": False}
    held = words.printable(text).replace(" %", HELD)
    filled = textwrap.fill(held, WIDTH, initial_indent="  ", subsequent_indent="  ", **options)
    return filled.replace(HELD, " %")


def _first_rows(table: Table) -> Table:
    """The table cut to what a screen takes, nodes closest to their limit kept."""
    if len(table.rows) <= MOST_NODES:
        return table
    fullest = sorted(table.rows, key=lambda row: -float(row[-1].split()[0]))[:MOST_NODES]
    rows = tuple(row for row in table.rows if row in fullest)
    left_out = len(table.rows) - len(rows)
    return Table(
        table.title,
        table.headers,
        rows,
        table.numeric,
        " ".join((f"and {left_out} more in nodes.csv.", table.note)).strip(),
    )


def table_lines(table: Table) -> list[str]:
    """Lines of a table, cut to the width of the page."""
    cells = [table.headers, *table.rows]
    widths = [max(len(row[i]) for row in cells) for i in range(len(table.headers))]
    for column, least in ((1, 14), (0, 14), (1, 6)):
        spare = WIDTH - 2 - 2 * (len(widths) - 1) - sum(widths)
        widths[column] = max(min(least, widths[column]), widths[column] + min(spare, 0))
    lines = []
    for row in cells:
        fitted = [_cut(cell, width) for cell, width in zip(row, widths, strict=True)]
        placed = (
            c.rjust(w) if i in table.numeric else c.ljust(w)
            for i, (c, w) in enumerate(zip(fitted, widths, strict=True))
        )
        lines.append("  " + "  ".join(placed).rstrip())
    return lines + ([wrapped(table.note)] if table.note else [])


def _cut(text: str, width: int) -> str:
    """Text without its middle where it is too long: a product and its first factor differ at the end."""
    if len(text) <= width:
        return text
    end = (width - 1) // 2
    return text[: width - 1 - end] + "…" + text[len(text) - end :]


def painted(text: str, role: str, colour: bool) -> str:
    """Text in the terminal's colour of a role."""
    return f"{TERMINAL[role]}{text}{TERMINAL['end']}" if colour else text
