"""Plans that several test modules look at, made once per test run."""

from __future__ import annotations

import functools
import os
import pickle
from pathlib import Path

import pytest
from filelock import FileLock

from patchplan.equation.reader import read_problem
from patchplan.pipeline import plan as make_plan
from patchplan.report.records import Plan
from tests.cases.convert import problem_text, read_cases

EQUATIONS = Path(__file__).parents[1] / "equations"
#: Problems that are for tests alone.
BOARDS = Path(__file__).parent / "boards"
CASES = read_cases()


class Plans:
    """Plans by name: a file of ``equations/`` or ``boards/`` (stem) or a reference case; workers share a folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.of = functools.cache(self._of)

    def problem_file(self, name: str) -> Path:
        """Problem file of that name; a case's is written first."""
        if name not in CASES:
            own = BOARDS / f"{name}.toml"
            return own if own.exists() else EQUATIONS / f"{name}.toml"
        path = self.folder / f"{name}.toml"
        if not path.exists():
            path.write_text(problem_text(CASES[name]), encoding="utf-8")
        return path

    def _of(self, name: str) -> Plan:
        stored = self.folder / f"{name}.pickle"
        with FileLock(self.folder / f"{name}.lock"):
            if not stored.exists():
                plan = make_plan(read_problem(self.problem_file(name)))
                stored.write_bytes(pickle.dumps(plan))
                return plan
        # Written by another worker of this run, never by anybody else.
        plan = pickle.loads(stored.read_bytes())
        assert isinstance(plan, Plan)
        return plan


def shared_plans(factory: pytest.TempPathFactory) -> Plans:
    """Plans kept in a folder that all workers of one run share."""
    base = factory.getbasetemp()
    folder = (base.parent if "PYTEST_XDIST_WORKER" in os.environ else base) / "plans"
    folder.mkdir(exist_ok=True)
    return Plans(folder)
