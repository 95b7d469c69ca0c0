"""Text of a formula cut into tokens, with every limit on size checked first."""

from __future__ import annotations

import re
from collections.abc import Collection
from dataclasses import dataclass
from fractions import Fraction
from typing import NoReturn

from patchplan.errors import Fault, ProblemFaults
from patchplan.quantity import NUMBER, SUFFIXES, exact_number

MAX_LENGTH = 4000
MAX_PARENTHESES = 40

_NAME = re.compile(r"([A-Za-z_][A-Za-z0-9_]*)('*)")
_OPERATOR = re.compile(r"\*\*|[-+*/^(),=]")
_LOOKALIKES = {"−": "-", "–": "-", "×": "*", "·": "*", "÷": "/", "’": "'", "′": "'", "″": "''", "µ": "u", "π": "pi"}


@dataclass(frozen=True, slots=True)
class Token:
    """One token.

    Attributes
    ----------
    kind
        "number", "name", "end", or the operator itself (``**`` is read as ``^``).
    value
        Exact value of a number with its suffix.
    """

    kind: str
    text: str
    start: int
    end: int
    primes: int = 0
    value: Fraction = Fraction(0)


def refuse(found: str, remedy: str, key: str, start: int, end: int) -> NoReturn:
    """Raise one fault at a span of the string at `key`."""
    raise ProblemFaults([Fault(found, remedy, key, (start, end))])


def tokenise(text: str, key: str, names: Collection[str] = ()) -> list[Token]:
    """Tokens of a formula, an "end" token last.

    Parameters
    ----------
    text, key
        The formula and the dotted TOML key of its string.
    names
        Names of the file; a suffix letter among them is refused.

    Raises
    ------
    ProblemFaults
        With one fault: too long, nested too deep, a character or number that is not understood.
    """
    if len(text) > MAX_LENGTH:
        refuse(
            f"The formula is {len(text)} characters long; {MAX_LENGTH} are allowed.",
            "Split it with definitions.", key, MAX_LENGTH, len(text),
        )  # fmt: skip
    _check_parentheses(text, key)
    tokens: list[Token] = []
    at = 0
    while at < len(text):
        if text[at] in " \t\r\n":
            at += 1
            continue
        tokens.append(_token_at(text, at, key, names))
        at = tokens[-1].end
    return [*tokens, Token("end", "", len(text), len(text))]


def _check_parentheses(text: str, key: str) -> None:
    opened: list[int] = []
    for at, letter in enumerate(text):
        if letter == "(":
            opened.append(at)
            if len(opened) > MAX_PARENTHESES:
                refuse(
                    f"Parentheses are nested deeper than {MAX_PARENTHESES}.",
                    "Split the formula with definitions.", key, at, at + 1,
                )  # fmt: skip
        elif letter == ")":
            if not opened:
                refuse('This ")" closes nothing.', 'Remove it, or add the "(" before it.', key, at, at + 1)
            opened.pop()
    if opened:
        refuse('This "(" is never closed.', 'Add the ")" after it.', key, opened[-1], opened[-1] + 1)


def _token_at(text: str, at: int, key: str, names: Collection[str]) -> Token:
    if match := NUMBER.match(text, at):
        return _number(text, match, key, names)
    if match := _NAME.match(text, at):
        return Token("name", match[1], at, match.end(), primes=len(match[2]))
    if match := _OPERATOR.match(text, at):
        return Token("^" if match[0] == "**" else match[0], match[0], at, match.end())
    if text[at] == "'":
        refuse("This prime mark follows no name.", "Write it right after the name: z'.", key, at, at + 1)
    instead = _LOOKALIKES.get(text[at])
    remedy = f"Write {instead} instead." if instead else "Use + - * / ^ ( ) and names of ASCII letters, digits and _."
    refuse(f'The character "{text[at]}" means nothing in a formula.', remedy, key, at, at + 1)


def _number(text: str, match: re.Match[str], key: str, names: Collection[str]) -> Token:
    at, end = match.span()
    try:
        value = exact_number(match[0])
    except ValueError as error:
        refuse(str(error), "Write a number of usual size.", key, at, end)
    glued = _NAME.match(text, end)
    if glued is None:
        if NUMBER.match(text, end):
            refuse(f'"{match[0]}" is followed by another number.', "Write one decimal point.", key, at, end + 1)
        return Token("number", match[0], at, end, value=value)
    if glued[0] not in SUFFIXES:
        refuse(
            f'"{match[0]}{glued[0]}" is no number; a product needs its sign.',
            f"Write {match[0]}*{glued[0]}.", key, at, glued.end(),
        )  # fmt: skip
    if glued[0] in names:
        power = SUFFIXES[glued[0]]
        refuse(
            f'In "{match[0]}{glued[0]}" the letter {glued[0]} may be a suffix or the name {glued[0]} of this file.',
            f"Write {match[0]}*{glued[0]} or {match[0]}e{power}." if "e" not in match[0].lower()
            else f"Write {match[0]}*{glued[0]}, or the number without suffix.", key, at, glued.end(),
        )  # fmt: skip
    return Token("number", text[at : glued.end()], at, glued.end(), value=value * Fraction(10) ** SUFFIXES[glued[0]])
