"""The house stands as drawn: rooms import downward only, files and functions stay short, no machine leaks in."""

from __future__ import annotations

import ast
import re
import tomllib
from collections.abc import Iterator
from itertools import chain
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
SOURCES = sorted((ROOT / "patchplan").rglob("*.py"))
TESTS = sorted((ROOT / "tests").rglob("*.py"))
#: Rows of the house, top first; a module imports from its own room and from rows above.
ROWS = (
    ("errors", "quantity", "version"), ("equation",), ("reach",), ("form",), ("patch",), ("ranges",), ("sensitivity",),
    ("horizon",), ("sizing",), ("circuit",), ("check",), ("compare",), ("report",), ("shortlist",), ("pipeline",),
    ("builds",), ("compared",), ("cli",),
)  # fmt: skip
ROW_OF = {room: row for row, rooms in enumerate(ROWS) for room in rooms}
SYMPY_ROOMS = ("equation", "form", "patch")
TEXT_SUFFIXES = {".py", ".toml", ".md", ".json", ".html", ".css", ".csv", ".yml", ""}


def room_of(path: Path, root: Path = ROOT) -> str:
    return path.relative_to(root / "patchplan").parts[0].removesuffix(".py")


def imports(path: Path) -> Iterator[str]:
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            yield node.module or ""


def wrong_imports(path: Path, root: Path = ROOT) -> list[str]:
    own = room_of(path, root)
    wrong = []
    for name in imports(path):
        if name.partition(".")[0] != "patchplan":
            continue
        room = name.split(".")[1] if "." in name else ""
        if room != own and not (room and ROW_OF[room] <= ROW_OF[own]):
            wrong.append(name)
    return wrong


def named(paths: list[Path]) -> list[pytest.param]:
    return [pytest.param(path, id=str(path.relative_to(ROOT))) for path in paths]


@pytest.mark.parametrize("path", named([p for p in SOURCES if p != ROOT / "patchplan" / "__init__.py"]))
def test_a_module_imports_only_from_rooms_above(path):
    assert room_of(path) in ROW_OF, "a new room needs its row in ROWS"
    assert wrong_imports(path) == []


def test_an_upward_import_is_seen(tmp_path):
    module = tmp_path / "patchplan" / "form" / "new.py"
    module.parent.mkdir(parents=True)
    module.write_text("def f():\n    from patchplan.sizing.records import Sizing\nimport patchplan\nimport numpy\n")
    assert sorted(wrong_imports(module, tmp_path)) == ["patchplan", "patchplan.sizing.records"]


@pytest.mark.parametrize("path", named(SOURCES))
def test_sympy_stays_in_its_rooms_and_inside_functions(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    if room_of(path) not in SYMPY_ROOMS:
        assert not any(name.partition(".")[0] == "sympy" for name in imports(path))
    top = [node for node in tree.body if isinstance(node, ast.Import | ast.ImportFrom)]
    names = chain.from_iterable(
        [a.name for a in n.names] if isinstance(n, ast.Import) else [n.module or ""] for n in top
    )
    assert not any(name.partition(".")[0] in ("sympy", "matplotlib") for name in names)


@pytest.mark.parametrize("path", named(SOURCES + TESTS))
def test_files_and_functions_are_short(path):
    text = path.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= 350
    functions = [n for n in ast.walk(ast.parse(text)) if isinstance(n, ast.FunctionDef | ast.AsyncFunctionDef)]
    assert [f.name for f in functions if (f.end_lineno or 0) - f.lineno + 1 > 60] == []


def test_nine_of_ten_functions_have_at_most_thirty_lines():
    lengths = sorted(
        (node.end_lineno or 0) - node.lineno + 1
        for path in SOURCES
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.FunctionDef)
    )
    assert lengths[int(0.9 * len(lengths))] <= 30


def shipped() -> list[Path]:
    folders = ("patchplan", "tests", "equations", ".ci")
    files = [p for folder in folders for p in (ROOT / folder).rglob("*") if p.is_file()]
    # A worktree has a file .git that says where its repository is.
    files += [p for p in ROOT.iterdir() if p.is_file() and p.name != ".git"]
    return [p for p in files if p.suffix in TEXT_SUFFIXES and "__pycache__" not in p.parts]


def test_no_path_of_a_machine_and_no_registry_host():
    # Put together here, so that this file does not find itself.
    words = ["/" + place + "/" for place in ("work", "home", "root", "tmp", "Users")]
    words += [host + ".org" for host in ("pypi", "pythonhosted")]
    pattern = re.compile("|".join(map(re.escape, words)))
    found = {
        f"{path.relative_to(ROOT)}: {match[0]}"
        for path in shipped()
        for match in pattern.finditer(path.read_text(encoding="utf-8"))
    }
    assert found == set()


def test_every_data_file_of_the_package_is_installed():
    data = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    patterns = data["tool"]["setuptools"]["package-data"]["patchplan"]
    installed = {p for pattern in patterns for p in (ROOT / "patchplan").glob(pattern)}
    files = {p for p in (ROOT / "patchplan").rglob("*") if p.is_file() and p.suffix not in (".py", ".pyc")}
    assert files - installed == set()


def test_tests_mirror_the_rooms():
    rooms = {p.name for p in (ROOT / "patchplan").iterdir() if (p / "__init__.py").is_file()}
    assert rooms <= {p.name for p in (ROOT / "tests").iterdir() if list(p.glob("test_*.py"))}
