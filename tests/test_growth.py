"""What planning may cost on boards of hundreds of states: no dense n-by-n array, no symbolic algebra over them."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from types import FrameType
from typing import Any

import numpy as np
import pytest

from patchplan.equation.reader import read_problem
from patchplan.pipeline import Choices, plan_with
from tests.bench.ladder import LADDERS

PACKAGE = str(Path(sys.modules["patchplan"].__file__ or "").parent)
#: Just above 300, and no number of points in time that any grid has.
MANY = 307


def written(text: str, folder: Path) -> Path:
    path = folder / "ladder.toml"
    path.write_text(text, encoding="utf-8")
    return path


def arrays_in(value: Any, depth: int = 2) -> Iterator[np.ndarray]:
    """Arrays in a value, its attributes and its items."""
    if isinstance(value, np.ndarray):
        yield value
    elif depth and isinstance(value, (tuple, list)) and len(value) < 20:
        for item in value:
            yield from arrays_in(item, depth - 1)
    elif depth and hasattr(value, "__dict__") and not isinstance(value, type):
        for item in vars(value).values():
            yield from arrays_in(item, depth - 1)


def dense(array: np.ndarray, n: int) -> bool:
    """Whether two sides of an array are about a small multiple of n, which no number of points in time is."""
    sides = [s for s in array.shape if any(abs(s - k * n) <= 4 for k in (1, 2, 3, 4))]
    return len(sides) >= 2


class Watch:
    """Looks at every local variable and result of every function of the package as it returns."""

    def __init__(self, n: int) -> None:
        self.n, self.found, self.looked = n, [], 0

    def __call__(self, frame: FrameType, event: str, result: Any) -> None:
        if event != "return" or not frame.f_code.co_filename.startswith(PACKAGE):
            return
        for value in (*frame.f_locals.values(), result):
            if isinstance(value, (np.ndarray, tuple)) or "scipy.sparse" in type(value).__module__:
                for array in arrays_in(value):
                    self.looked += 1
                    if dense(array, self.n):
                        self.found.append((frame.f_code.co_qualname, array.shape))


def watched(work: Callable[[], object], n: int) -> Watch:
    watch = Watch(n)
    sys.setprofile(watch)
    try:
        work()
    finally:
        sys.setprofile(None)
    return watch


def test_no_dense_array_of_all_states_is_made_from_the_text_to_the_verdict(tmp_path: Path) -> None:
    problem = read_problem(written(LADDERS["heated bar, bounded input"](MANY), tmp_path))
    watch = watched(lambda: plan_with(problem, Choices(think="low")), MANY)
    assert watch.looked > 10 * MANY
    assert not watch.found


def test_the_watch_sees_a_dense_array() -> None:
    from patchplan.reach.variational import step_maps

    watch = watched(lambda: step_maps(np.array([0.0, 1.0]), np.zeros((3, MANY, MANY))), MANY)
    assert watch.found


def test_no_symbolic_algebra_takes_part_in_planning_a_ladder(tmp_path: Path) -> None:
    path = written(LADDERS["heated bar"](60), tmp_path)
    program = (
        "import sys; from pathlib import Path; from tests.bench.bench_ladder import to_circuit; "
        f"to_circuit(Path({str(path)!r})); print('sympy' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=True, cwd=Path(__file__).parents[1]
    )
    assert done.stdout.strip() == "False"


def test_symbolic_algebra_sees_adjustable_parameters_only(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    import sympy

    from patchplan.equation.explicit import build_system

    seen = []
    made = sympy.field
    monkeypatch.setattr(sympy, "field", lambda symbols, domain: (seen.append(symbols), made(symbols, domain))[1])
    text = """title = "Coupled masses"
equations = ["m*x' + h*y' = -x", "h*x' + m*y' = -y", "z' = x + y - z"]
duration = 1.0
[parameters]
m = 1.0
h = { from = 0.1, to = 0.3, value = 0.2 }
[start]
x = 1.0
y = 0.0
z = 0.0
"""
    build_system(read_problem(written(text, tmp_path)))
    assert [len(symbols) for symbols in seen] == [1]
