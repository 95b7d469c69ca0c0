"""Everything that can go wrong, as one tree.

::

    PatchplanError
    ├── ProblemFaults      the problem file cannot be used; holds one Fault each (exit code 2)
    ├── FolderRefused      the plan folder may not be written (exit code 2)
    └── CannotBuild        a sound problem that the parts cannot realise (exit code 1)

A :class:`Fault` says what was found, where, and what mends it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault of the user's file.

    Attributes
    ----------
    found
        What is wrong, one sentence.
    remedy
        What would be right, one sentence.
    key
        Dotted TOML key of the value at fault (``equations[2]``), "" where there is none.
    span
        Characters at fault: inside the string at ``key``, or inside the whole text where ``key`` is "";
        None points at the whole value.
    """

    found: str
    remedy: str
    key: str = ""
    span: tuple[int, int] | None = None


class PatchplanError(Exception):
    """Base of all errors of this package."""


class ProblemFaults(PatchplanError):
    """All faults of one problem file.

    Attributes
    ----------
    faults
        The faults, in file order.
    rendered
        The faults as text with file, line, the line at fault and a caret; filled in by the reader.
    """

    def __init__(self, faults: Iterable[Fault], rendered: str = "") -> None:
        self.faults = tuple(faults)
        self.rendered = rendered
        super().__init__(rendered or "\n".join(f"{f.key}: {f.found} {f.remedy}".lstrip(": ") for f in self.faults))


class FolderRefused(PatchplanError):
    """The plan folder is in use, or holds things that are not a plan."""


class CannotBuild(PatchplanError):
    """The parts at hand cannot realise the problem; the message says why and what would mend it."""
