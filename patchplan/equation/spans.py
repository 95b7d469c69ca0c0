"""Where each key and value of a TOML text stands; the text is known to be sound TOML already."""

from __future__ import annotations

import re
from dataclasses import dataclass, field

Span = tuple[int, int]

#: Deepest list or table that is read.
MAX_DEPTH = 20

_BLANK = re.compile(r"(?:[ \t\r\n]|#[^\n]*)*")
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_SCALAR = re.compile(r"[^,\]}#\n]+")
_ESCAPE = re.compile(r"\\(?:u[0-9A-Fa-f]{4}|U[0-9A-Fa-f]{8}|[ \t]*\n[ \t\n]*|.)")
_QUOTES = ('"""', "'''", '"', "'")
_SHORT = {"n": "\n", "t": "\t", "r": "\r", "b": "\b", "f": "\f", "e": "\x1b"}


@dataclass(frozen=True)
class Layout:
    """Spans by dotted key; an element of an array is ``key[0]``.

    Attributes
    ----------
    values
        Of the value, quotes included; of the header for a ``[table]``.
    keys
        Of the last part of the key itself.
    """

    values: dict[str, Span] = field(default_factory=dict)
    keys: dict[str, Span] = field(default_factory=dict)


def scan(text: str) -> Layout:
    """Layout of a text that ``tomllib`` has accepted.

    Raises
    ------
    RecursionError
        Where lists or tables are nested deeper than ``MAX_DEPTH``.
    """
    scanner = _Scanner(text)
    scanner.document()
    return scanner.layout


def raw_offset(raw: str, position: int) -> int:
    """Offset in the raw text of a TOML string, quotes included, of a position in the string it stands for."""
    quote = next((q for q in _QUOTES if raw.startswith(q)), "")
    at = len(quote)
    if len(quote) == 3 and raw.startswith("\n", at):
        at += 1
    done = 0
    while done < position and at < len(raw):
        match = _ESCAPE.match(raw, at) if quote.startswith('"') else None
        at = match.end() if match else at + 1
        done += not (match and match[0][1] in " \t\n")
    return min(at, len(raw))


def _unescaped(match: re.Match[str]) -> str:
    code = match[0][1:]
    return chr(int(code[1:], 16)) if code[0] in "uU" else _SHORT.get(code, code)


class _Scanner:
    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.depth = 0
        self.layout = Layout()
        self.counts: dict[str, int] = {}

    def document(self) -> None:
        prefix = ""
        self.skip()
        while self.at < len(self.text):
            if self.text[self.at] == "[":
                prefix = self.header()
            else:
                self.pair(prefix)
            self.skip()

    def skip(self) -> None:
        match = _BLANK.match(self.text, self.at)
        self.at = match.end() if match else self.at

    def header(self) -> str:
        start = self.at
        many = self.text.startswith("[[", start)
        self.at += 2 if many else 1
        name, key = self.key("")
        if many:
            self.counts[name] = self.counts.get(name, -1) + 1
            name = f"{name}[{self.counts[name]}]"
        self.skip()
        self.at += 2 if many else 1
        self.layout.values.setdefault(name, (start, self.at))
        self.layout.keys.setdefault(name, key)
        return name

    def key(self, prefix: str) -> tuple[str, Span]:
        """Dotted name of a key under `prefix`, and the span of its last part."""
        name = prefix
        while True:
            self.skip()
            start = self.at
            part = self.string() if self.text[start] in "\"'" else self.bare()
            name = f"{name}.{part}" if name else part
            span = (start, self.at)
            self.skip()
            if not self.text.startswith(".", self.at):
                return name, span
            self.layout.keys.setdefault(name, span)
            self.layout.values.setdefault(name, span)
            name = f"{name}[{self.counts[name]}]" if name in self.counts else name
            self.at += 1

    def bare(self) -> str:
        match = _BARE_KEY.match(self.text, self.at)
        if match is None:
            self.at += 1
            return ""
        self.at = match.end()
        return match[0]

    def string(self) -> str:
        quote = next(q for q in _QUOTES if self.text.startswith(q, self.at))
        start = self.at = self.at + len(quote)
        while self.at < len(self.text) and not self.text.startswith(quote, self.at):
            self.at += 2 if self.text[self.at] == "\\" and quote[0] == '"' else 1
        end = self.at
        self.at += len(quote)
        # A multi-line string may end in one or two quotes of its own.
        while len(quote) == 3 and self.text.startswith(quote[0], self.at):
            self.at += 1
        inside = self.text[start:end]
        return _ESCAPE.sub(_unescaped, inside) if quote == '"' else inside

    def pair(self, prefix: str) -> None:
        name, span = self.key(prefix)
        self.layout.keys[name] = span
        self.skip()
        self.at += 1
        self.value(name)

    def value(self, name: str) -> None:
        self.skip()
        self.depth += 1
        if self.depth > MAX_DEPTH:
            raise RecursionError
        start = self.at
        opening = self.text[start : start + 1]
        if opening == "[":
            self.array(name)
        elif opening == "{":
            self.table(name)
        elif opening in ('"', "'"):
            self.string()
        elif match := _SCALAR.match(self.text, start):
            self.at = start + len(match[0].rstrip())
        else:
            self.at += 1
        self.depth -= 1
        self.layout.values[name] = (start, self.at)

    def array(self, name: str) -> None:
        self.at += 1
        index = 0
        while not self.closed("]"):
            self.value(f"{name}[{index}]")
            index += 1

    def table(self, name: str) -> None:
        self.at += 1
        while not self.closed("}"):
            self.pair(name)

    def closed(self, bracket: str) -> bool:
        """Step over a comma or the closing bracket; whether it was the bracket."""
        self.skip()
        while self.text.startswith(",", self.at):
            self.at += 1
            self.skip()
        if self.at < len(self.text) and self.text[self.at] != bracket:
            return False
        self.at += 1
        return True
