"""A progress line for whatever lasts more than a second, on a terminal only."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager

#: Seconds before anything is shown.
DELAY = 1.0


@contextmanager
def shown_progress(wanted: bool) -> Iterator[Callable[[str], None]]:
    """Context that gives a function to call with the name of each stage.

    Parameters
    ----------
    wanted
        Whether to show anything at all.
    """
    if not wanted or not sys.stderr.isatty():
        yield lambda stage: None
        return
    line = _Line()
    timer = threading.Timer(DELAY, line.show)
    timer.daemon = True
    timer.start()
    try:
        yield line.name
    finally:
        timer.cancel()
        line.stop()


class _Line:
    """One line of the terminal that names the stage; shown by the timer's thread, ended by the main one."""

    def __init__(self) -> None:
        self._stage = ""
        self._ended = False
        self._stop: Callable[[], None] | None = None
        self._rename: Callable[[str], None] | None = None
        self._lock = threading.Lock()

    def name(self, stage: str) -> None:
        with self._lock:
            self._stage = stage
            if self._rename:
                self._rename(stage)

    def show(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

        with self._lock:
            if self._ended:
                return
            bar = Progress(TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn(),
                           console=Console(stderr=True), transient=True)  # fmt: skip
            task = bar.add_task(self._stage, total=None)
            bar.start()
            self._stop = bar.stop
            self._rename = lambda stage: bar.update(task, description=stage)

    def stop(self) -> None:
        with self._lock:
            self._ended = True
            if self._stop:
                self._stop()
