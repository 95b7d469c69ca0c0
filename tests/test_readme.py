"""What README.md shows is what the tool does."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import patchplan
from patchplan.report.summary import summary
from tests.plans import EQUATIONS, Plans

README = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")


def blocks(after: str) -> list[str]:
    """Indented or fenced blocks behind a phrase, the first of each."""
    rest = README.split(after, 1)[1]
    indented = re.search(r"\n\n((?:    .*\n|\n)+)", rest)
    return [re.sub(r"(?m)^    ", "", indented.group(1)).strip()] if indented else []


def shape(text: str) -> str:
    """Text with its figures masked: they may differ in the last digit on another machine."""
    return re.sub(r"#(?:[ .]#)*", "#", re.sub(r"-?\d+", "#", " ".join(text.split())))


def test_the_printed_plan_is_the_one_shown(plans: Plans) -> None:
    printed = summary(plans.of("seat_suspension"), Path("outputs/seat_suspension"))
    assert shape(printed) == shape(blocks("\nprints")[0])


def test_commands_name_files_that_exist() -> None:
    named = re.findall(r"equations/(\w+\.toml)", README)
    assert named
    assert all((EQUATIONS / name).is_file() for name in named)


def test_the_least_problem_file_plans() -> None:
    text = re.search(r"```toml\n(.*?)```", README, re.S)
    assert text is not None
    tomllib.loads(text.group(1))
    assert patchplan.plan(patchplan.read_problem(text.group(1))).verdict.verdict == "follows"
