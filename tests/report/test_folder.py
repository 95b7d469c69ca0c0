"""The plan folder is the old one or the new one, whatever happens, and what the user put there stays."""

from __future__ import annotations

import json
import os
import shutil
from pathlib import Path

import pytest
from filelock import FileLock

from patchplan.errors import FolderRefused
from patchplan.report import folder as module
from patchplan.report.folder import plan_files, replace_folder


class KilledError(BaseException):
    """Stands for the process ending at once: nothing in the program catches it."""


def files(version: str, *extra: str) -> dict[str, bytes]:
    names = ["plan.json", "nodes.csv", "data/road.csv", *extra]
    manifest = json.dumps({"contract": 1, "files": names, "version": version})
    return {name: f"{name} {version}".encode() for name in names} | {"plan.json": manifest.encode()}


def content(folder: Path) -> dict[str, bytes]:
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


@pytest.fixture
def place(tmp_path):
    return tmp_path / "outputs" / "plan"


def test_first_plan_is_written(place):
    replace_folder(place, files("one"))
    assert content(place) == files("one")


def test_new_plan_replaces_the_old_and_the_users_files_stay(place):
    replace_folder(place, files("one", "old.svg"))
    (place / "notes").mkdir()
    (place / "notes" / "mine.txt").write_text("mine")
    (place / "data" / "photo.png").write_bytes(b"photo")
    (place / "link").symlink_to("nowhere")
    replace_folder(place, files("two"))
    assert content(place) == files("two") | {"notes/mine.txt": b"mine", "data/photo.png": b"photo"}
    assert os.readlink(place / "link") == "nowhere"
    assert sorted(p.name for p in place.parent.iterdir() if p.name != ".plan.lock") == ["plan"]


def test_folder_without_a_plan_is_refused_and_left_alone(place):
    place.mkdir(parents=True)
    (place / "thesis.txt").write_text("years of work")
    with pytest.raises(FolderRefused, match="holds no plan"):
        replace_folder(place, files("one"))
    assert content(place) == {"thesis.txt": b"years of work"}


@pytest.mark.parametrize("text", ["{}", "[1]", "not json", '{"contract": 1}'])
def test_some_other_plan_json_is_no_plan(place, text):
    place.mkdir(parents=True)
    (place / "plan.json").write_text(text)
    with pytest.raises(FolderRefused):
        replace_folder(place, files("one"))
    assert (place / "plan.json").read_text() == text


def test_empty_folder_is_taken(place):
    place.mkdir(parents=True)
    replace_folder(place, files("one"))
    assert content(place) == files("one")


def test_a_file_in_the_way_is_refused(place):
    place.parent.mkdir()
    place.write_text("a file")
    with pytest.raises(FolderRefused, match="is a file"):
        replace_folder(place, files("one"))
    assert place.read_text() == "a file"


def test_users_file_under_a_name_of_the_new_plan_is_refused(place):
    replace_folder(place, files("one"))
    (place / "signal_x.svg").write_text("mine")
    with pytest.raises(FolderRefused, match=r"signal_x\.svg"):
        replace_folder(place, files("two", "signal_x.svg"))
    assert content(place) == files("one") | {"signal_x.svg": b"mine"}


def test_folder_that_another_run_writes_is_refused(place):
    replace_folder(place, files("one"))
    with FileLock(place.with_name(".plan.lock")), pytest.raises(FolderRefused, match="Another run"):
        replace_folder(place, files("two"), patience=0.05)
    assert content(place) == files("one")


def killed_after(monkeypatch, survived: int) -> list[str]:
    """Let the process die at the step after so many; gives the steps that were taken."""
    taken: list[str] = []

    def watched(name, function):
        def step(*arguments, **options):
            if len(taken) == survived:
                raise KilledError(name)
            taken.append(name)
            return function(*arguments, **options)

        return step

    monkeypatch.setattr(os, "rename", watched("rename", os.rename))
    monkeypatch.setattr(os, "link", watched("link", os.link))
    monkeypatch.setattr(os, "fsync", watched("write", os.fsync))
    monkeypatch.setattr(os, "unlink", watched("unlink", os.unlink))
    monkeypatch.setattr(module.shutil, "rmtree", watched("rmtree", shutil.rmtree))
    return taken


def count_steps(place: Path, monkeypatch) -> int:
    with monkeypatch.context() as patch:
        taken = killed_after(patch, -1)
        replace_folder(place, files("two", "new.svg"))
    return len(taken)


def test_killed_at_any_step_leaves_a_whole_plan_and_the_next_run_mends(tmp_path, monkeypatch):
    def begin(name: str) -> Path:
        place = tmp_path / name / "plan"
        replace_folder(place, files("one", "old.svg"))
        (place / "mine.txt").write_text("mine")
        return place

    steps = count_steps(begin("whole"), monkeypatch)
    assert steps > 8
    mine = {"mine.txt": b"mine"}
    for survived in range(steps):
        place = begin(f"killed{survived}")
        with monkeypatch.context() as patch:
            killed_after(patch, survived)
            with pytest.raises(KilledError):
                replace_folder(place, files("two", "new.svg"))
        # Between the two renames the old plan stands whole beside its place.
        found = content(place if place.exists() else place.with_name(".plan.old"))
        assert found in (files("one", "old.svg") | mine, files("two", "new.svg") | mine), survived
        replace_folder(place, files("three"))
        assert content(place) == files("three") | mine, survived
        assert sorted(p.name for p in place.parent.iterdir() if p.name != ".plan.lock") == ["plan"], survived


def test_a_full_disk_leaves_everything_as_it_was(place, monkeypatch):
    replace_folder(place, files("one"))

    def full(descriptor):
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", full)
        with pytest.raises(OSError, match="No space"):
            replace_folder(place, files("two"))
    assert content(place) == files("one")
    assert sorted(p.name for p in place.parent.iterdir() if p.name != ".plan.lock") == ["plan"]


def test_killed_between_the_renames_is_finished_by_mend(place, monkeypatch):
    replace_folder(place, files("one"))
    with monkeypatch.context() as patch:
        real, seen = os.rename, []

        def second_fails(source, target):
            seen.append(source)
            if len(seen) == 2:
                raise KilledError
            real(source, target)

        patch.setattr(os, "rename", second_fails)
        with pytest.raises(KilledError):
            replace_folder(place, files("two"))
    assert not place.exists()
    module.mend(place)
    assert content(place) == files("two")


def test_manifest_names_the_plans_files(place):
    replace_folder(place, files("one"))
    assert plan_files(place) == {"plan.json", "nodes.csv", "data/road.csv"}
    assert plan_files(place.parent) is None
