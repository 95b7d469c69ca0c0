"""report.html: one page that needs no network."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from patchplan.report import style, words
from patchplan.report.pictures import MOST_SIGNALS
from patchplan.report.plan_json import notes_of, warnings_of
from patchplan.report.records import Plan
from patchplan.report.sheet import control_table, knob_table, package_table, serial_table, static_table, steps
from patchplan.report.tables import (
    budget_table,
    coefficient_table,
    form_table,
    loop_table,
    node_table,
    parts_table,
    signal_table,
    source_table,
    speed_table,
    stage_table,
)
from patchplan.report.trimming import trimming_table

_TEMPLATE = Path(__file__).with_name("page.html")


def page(
    plan: Plan, start: Mapping[str, float], drawings: Mapping[str, str], sources: dict[str, str], files: Sequence[str]
) -> str:
    """HTML text of a plan that was built.

    Parameters
    ----------
    start
        Volts of every net in hold, or at the start of the run where the board has no hold.
    drawings
        File name -> SVG text; they are put into the page.
    sources
        Source -> name of its waveform file.
    files
        Names of the files of the folder.
    """
    from jinja2 import Environment
    from markupsafe import Markup

    assert plan.circuit is not None
    template = Environment(autoescape=True).from_string(_TEMPLATE.read_text(encoding="utf-8"))
    return template.render(
        title=plan.problem.title,
        light=style.page_variables(style.LIGHT),
        dark=style.page_variables(style.DARK),
        works=plan.verdict.verdict == "follows",
        story=words.story(plan),
        reasons=words.reasons(plan),
        remedies=words.remedies(plan),
        warnings=warnings_of(plan),
        notes=notes_of(plan),
        # The pictures come from our own drawing; it escapes every name in them.
        drawings=[(name, Markup(embedded(svg, name))) for name, svg in drawings.items()],
        pictures_left_out=len(plan.verdict.curves) - MOST_SIGNALS if drawings else 0,
        tables=[
            signal_table(plan), node_table(plan), source_table(plan, sources), stage_table(plan),
            coefficient_table(plan), loop_table(plan), form_table(plan), budget_table(plan), speed_table(plan),
            parts_table(plan.circuit), package_table(plan),
        ],
        steps=steps(plan),
        control=control_table(plan),
        static=static_table(plan, start),
        sheets=[trimming_table(plan), serial_table(plan), knob_table(plan)],
        cautions=words.CAUTIONS,
        problem=plan.problem.text,
        files=files,
    )  # fmt: skip


def embedded(svg: str, name: str) -> str:
    """SVG to put into a page: hues follow the page, and identifiers are unlike those of the other pictures."""
    body = svg[svg.index("<svg") :]
    prefix = name.rpartition(".")[0]
    for mark in ('id="', 'href="#', "url(#"):
        body = body.replace(mark, f"{mark}{prefix}-")
    return style.themed(body)
