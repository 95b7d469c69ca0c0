"""The progress line: only on a terminal, only after a while, gone at the end."""

from __future__ import annotations

import io
import sys
import time

from patchplan.report import progress
from patchplan.report.progress import shown_progress


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def terminal_of(monkeypatch) -> Terminal:
    """Called by the test itself: the capture of the test runner puts its own stream back after fixtures."""
    stream = Terminal()
    monkeypatch.setattr(sys, "stderr", stream)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setenv("COLUMNS", "80")
    return stream


def wait_for(stream: Terminal, text: str) -> None:
    end = time.monotonic() + 20
    while text not in stream.getvalue() and time.monotonic() < end:
        time.sleep(0.02)
    assert text in stream.getvalue()


def test_long_work_names_its_steps(monkeypatch):
    terminal = terminal_of(monkeypatch)
    monkeypatch.setattr(progress, "DELAY", 0.0)
    with shown_progress(True) as say:
        say("Solving the problem")
        wait_for(terminal, "Solving the problem")
        say("Choosing values")
        wait_for(terminal, "Choosing values")


def test_short_work_shows_nothing(monkeypatch):
    terminal = terminal_of(monkeypatch)
    with shown_progress(True) as say:
        say("Solving the problem")
    assert terminal.getvalue() == ""


def test_not_wanted_shows_nothing(monkeypatch):
    terminal = terminal_of(monkeypatch)
    monkeypatch.setattr(progress, "DELAY", 0.0)
    with shown_progress(False) as say:
        say("Solving the problem")
        time.sleep(0.1)
    assert terminal.getvalue() == ""


def test_no_terminal_shows_nothing(monkeypatch):
    stream = io.StringIO()
    monkeypatch.setattr(sys, "stderr", stream)
    monkeypatch.setattr(progress, "DELAY", 0.0)
    with shown_progress(True) as say:
        say("Solving the problem")
        time.sleep(0.1)
    assert stream.getvalue() == ""
