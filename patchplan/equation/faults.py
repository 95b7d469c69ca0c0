"""Faults as text: file, line and column, what is wrong, what is right, and a caret under the place."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterable, Mapping

from patchplan.equation.problem import Problem
from patchplan.equation.spans import Span, raw_offset
from patchplan.errors import Fault, ProblemFaults

#: Longest source line shown whole, and what is shown on either side of the place in a longer one.
_LONGEST = 160
_AROUND = 60


def place_of(fault: Fault, text: str, spans: Mapping[str, Span]) -> Span | None:
    """Span of a fault in the whole text, of the nearest enclosing key where its own is not in the file, or None."""
    if not fault.key:
        return fault.span
    key = fault.key
    while key and key not in spans:
        key = key[: max(key.rfind("."), key.rfind("["), 0)]
    if not key:
        return None
    start, end = spans[key]
    if fault.span is None or key != fault.key or text[start : start + 1] not in ('"', "'"):
        return (start, end)
    raw = text[start:end]
    return start + raw_offset(raw, fault.span[0]), start + raw_offset(raw, fault.span[1])


def render(faults: Iterable[Fault], *, text: str, file: str, spans: Mapping[str, Span]) -> str:
    """Every fault as ``file:line:column: found remedy``, the source line and a caret line.

    Parameters
    ----------
    faults
        In the order wanted.
    text, file
        The problem file's text and its name.
    spans
        Dotted key -> span of its value in `text`.
    """
    starts = [0, *(i + 1 for i, letter in enumerate(text) if letter == "\n")]
    blocks = []
    for fault in faults:
        place = place_of(fault, text, spans)
        start, end = place or (0, 0)
        number = bisect_right(starts, min(start, len(text)))
        first = starts[number - 1]
        last = starts[number] - 1 if number < len(starts) else len(text)
        head = f"{file}:{number}:{start - first + 1}: {fault.found} {fault.remedy}".rstrip()
        lines = _marked(text[first:last], start - first, end - first) if place else []
        blocks.append("\n".join([_printable(head), *lines]))
    return "\n".join(blocks)


def render_faults(faults: Iterable[Fault], problem: Problem) -> str:
    """Faults found after reading, rendered as the reader renders its own."""
    return render(faults, text=problem.text, file=problem.file, spans=problem.spans)


def rendered(error: ProblemFaults, problem: Problem) -> ProblemFaults:
    """The same faults with their text, in file order."""
    faults = in_file_order(error.faults, problem.text, problem.spans)
    return ProblemFaults(faults, render_faults(faults, problem))


def in_file_order(faults: Iterable[Fault], text: str, spans: Mapping[str, Span]) -> list[Fault]:
    """Faults sorted by place, equal ones once."""
    return sorted(dict.fromkeys(faults), key=lambda fault: place_of(fault, text, spans) or (0, 0))


def _marked(line: str, start: int, end: int) -> list[str]:
    """The source line and its caret line; none for an empty line."""
    if not line.strip():
        return []
    end = min(max(end, start + 1), max(len(line), start + 1))
    if len(line) > _LONGEST:
        cut = max(start - _AROUND, 0)
        end = min(end, start + _AROUND) - cut
        line, start = ("…" if cut else line[:1]) + line[cut + 1 : start + _AROUND], start - cut
    blank = "".join("\t" if letter == "\t" else " " for letter in line[:start])
    return [f"    {_printable(line)}", f"    {blank}{'^' * (end - start)}"]


def _printable(text: str) -> str:
    # Escape sequences of a foreign file must not reach the terminal.
    return "".join(letter if letter.isprintable() or letter == "\t" else "?" for letter in text)
