"""Frozen records to JSON and back, by their type hints alone."""

from __future__ import annotations

import math
import types
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from fractions import Fraction
from functools import cache
from typing import Any, Union, get_args, get_origin, get_type_hints


def rounded(value: float) -> float | None:
    """The number to 9 significant digits, None where it is no finite number."""
    return float(f"{value:.9g}") if math.isfinite(value) else None


def encode(value: Any) -> Any:
    """JSON form of a record.

    Exact rationals become "p/q", floats keep 9 digits ("inf" as a string), mappings are sorted by key, fields outside
    equality (origins) are left out.
    """
    if value is None or isinstance(value, (str, int)):
        return value
    if is_dataclass(value) and not isinstance(value, type):
        return {name: encode(getattr(value, name)) for name in _compared(value.__class__)}
    if isinstance(value, Mapping):
        return {key: encode(value[key]) for key in sorted(value)}
    if isinstance(value, tuple):
        return [encode(item) for item in value]
    if isinstance(value, Fraction):
        return str(value)
    if isinstance(value, float):
        return rounded(value) if math.isfinite(value) else str(float(value))
    return value


@cache
def _compared(kind: type[Any]) -> tuple[str, ...]:
    return tuple(f.name for f in fields(kind) if f.compare)


def decode(hint: Any, data: Any) -> Any:
    """Record of type ``hint`` from its JSON form.

    A union of records is told apart by the names of its fields.

    Raises
    ------
    TypeError
        Where the data do not fit the type.
    """
    origin, arguments = get_origin(hint), get_args(hint)
    if origin in (Union, types.UnionType):
        return None if data is None else decode(_member(arguments, data), data)
    if is_dataclass(hint) and isinstance(hint, type):
        hints = _hints(hint)
        return hint(**{name: decode(hints[name], item) for name, item in data.items()})
    if origin is tuple:
        kinds = arguments[:1] * len(data) if arguments[-1] is Ellipsis else arguments
        return tuple(decode(kind, item) for kind, item in zip(kinds, data, strict=True))
    if origin is Mapping:
        return {key: decode(arguments[1], item) for key, item in data.items()}
    return hint(data) if hint in (Fraction, float) else data


def _member(members: tuple[Any, ...], data: Any) -> Any:
    real = [m for m in members if m is not type(None)]
    if len(real) == 1:
        return real[0]
    for member in real:
        if isinstance(data, dict) and {f.name for f in fields(member) if f.compare} == set(data):
            return member
    raise TypeError(f"No record of this union has the fields of {data!r}.")


@cache
def _hints(record: type) -> dict[str, Any]:
    return get_type_hints(record)
