"""A folder that is replaced whole or not at all.

The new folder is built beside the old one, what the user put into the old one is linked into it, and two renames swap
them. Names beside ``plan``: ``.plan.new`` is being built, ``.plan.old`` was moved out of the way, ``.plan.gone`` may be
deleted, ``.plan.lock`` is the lock.
"""

from __future__ import annotations

import json
import os
import re
import shutil
from collections.abc import Collection, Iterable, Mapping
from pathlib import Path

from patchplan.errors import FolderRefused

#: The file that says which files are the plan's.
MANIFEST = "plan.json"
#: Seconds to wait for another run that writes the same folder.
PATIENCE = 20.0


def may_write(folder: Path, manifest: str = MANIFEST) -> None:
    """Refuse a folder that holds things which are no plan (or what else has this manifest).

    Raises
    ------
    FolderRefused
        With what was found and what to do.
    """
    if os.path.lexists(folder) and not folder.is_dir():
        raise FolderRefused(f"{folder} is a file, and the plan needs a folder. Name another one with --into.")
    if folder.is_dir() and any(folder.iterdir()) and plan_files(folder, manifest) is None:
        raise FolderRefused(
            f"{folder} is not empty and holds no {Path(manifest).stem} ({manifest} of this program is missing in it). "
            "Nothing was written. Name another folder with --into, or empty this one."
        )


def replace_folder(
    folder: Path, files: Mapping[str, bytes], *, patience: float = PATIENCE, manifest: str = MANIFEST
) -> None:
    """Write a plan folder, in place of an earlier plan if there is one.

    Parameters
    ----------
    folder
        Where the plan goes; parents are made.
    files
        Name relative to the folder -> content; holds the manifest, whose ``files`` names them all.
    patience
        Longest wait for another run that writes here [s].
    manifest
        The file of the folder that says which files are ours.

    Raises
    ------
    FolderRefused
        Where the folder holds no plan and is not empty, a file of the user stands in the way, or another run
        writes here.
    """
    from filelock import FileLock, Timeout

    folder = folder.resolve()
    folder.parent.mkdir(parents=True, exist_ok=True)
    try:
        with FileLock(_beside(folder, "lock"), timeout=patience):
            mend(folder)
            may_write(folder, manifest)
            _refuse_clashes(folder, files, manifest)
            try:
                _build(folder, files, manifest)
            except Exception:
                shutil.rmtree(_beside(folder, "new"), ignore_errors=True)
                raise
            _swap(folder)
            _sweep(folder)
    except Timeout:
        raise FolderRefused(f"Another run is writing {folder}. Try again when it has ended.") from None


def mend(folder: Path) -> None:
    """Finish or roll back a swap that was interrupted."""
    new, old, gone = (_beside(folder, name) for name in ("new", "old", "gone"))
    if old.is_dir() and not os.path.lexists(folder):
        # The old plan is only moved away once the new one is complete.
        os.rename(new if new.is_dir() else old, folder)
    if old.is_dir():
        shutil.rmtree(gone, ignore_errors=True)
        os.rename(old, gone)
    for leftover in (new, gone):
        if leftover.is_dir():
            shutil.rmtree(leftover)


def plan_files(folder: Path, manifest: str = MANIFEST) -> frozenset[str] | None:
    """Files that belong to the plan in a folder; None where it holds no plan."""
    try:
        data = json.loads((folder / manifest).read_text(encoding="utf-8"))
        if "contract" in data:
            return frozenset(map(str, data["files"]))
    except (OSError, ValueError, TypeError, KeyError):
        pass
    return None


def _refuse_clashes(folder: Path, files: Mapping[str, bytes], manifest: str) -> None:
    ours = plan_files(folder, manifest) or frozenset()
    clashes = [name for name in files if name not in ours and os.path.lexists(folder / name)]
    if clashes:
        raise FolderRefused(
            f"{folder / clashes[0]} is not of the earlier plan, and the new plan has a file of this name. "
            "Nothing was written. Rename or move yours."
        )


def _build(folder: Path, files: Mapping[str, bytes], manifest: str) -> None:
    new = _beside(folder, "new")
    if folder.is_dir():
        _link_tree(folder, new, plan_files(folder, manifest) or frozenset())
    for name, content in files.items():
        path = new / name
        path.parent.mkdir(parents=True, exist_ok=True)
        with path.open("wb") as stream:
            stream.write(content)
            stream.flush()
            os.fsync(stream.fileno())


def _link_tree(source: Path, target: Path, left_out: Collection[str]) -> None:
    """Put everything of a folder but some files into another, as further names of the same files."""

    def ignore(directory: str, names: list[str]) -> list[str]:
        inside = Path(directory).relative_to(source)
        return [name for name in names if (inside / name).as_posix() in left_out]

    shutil.copytree(source, target, symlinks=True, ignore=ignore, copy_function=_link_or_copy)


def _link_or_copy(source: str, target: str) -> None:
    try:
        os.link(source, target)
    except OSError:
        shutil.copy2(source, target)


def _swap(folder: Path) -> None:
    if folder.is_dir():
        os.rename(folder, _beside(folder, "old"))
    os.rename(_beside(folder, "new"), folder)


def _sweep(folder: Path) -> None:
    old, gone = _beside(folder, "old"), _beside(folder, "gone")
    if old.is_dir():
        os.rename(old, gone)
        shutil.rmtree(gone)


def _beside(folder: Path, what: str) -> Path:
    return folder.with_name(f".{folder.name}.{what}")


def unused_name(stem: str, name: str, suffix: str, taken: Iterable[str]) -> str:
    """File name for a signal, legal everywhere and unlike the names taken, without regard to case."""
    base = re.sub(r"[^A-Za-z0-9]+", "_", name.replace("'", "_d")).strip("_")[:40] or "signal"
    used = {t.lower() for t in taken}
    number, wish = 2, f"{stem}_{base}.{suffix}"
    while wish.lower() in used:
        number, wish = number + 1, f"{stem}_{base}_{number}.{suffix}"
    return wish
