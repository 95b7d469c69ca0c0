"""The ``[parameters]`` table: numbers, formulas of other parameters, adjustable ranges."""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction
from graphlib import CycleError, TopologicalSorter
from typing import Any

from patchplan.equation.constants import names_of
from patchplan.equation.problem import Parameter
from patchplan.equation.reading import Reading
from patchplan.equation.tree import Node

_KEYS = ("value", "unit", "tolerance", "from", "to")


def read_parameters(reading: Reading) -> dict[str, Parameter]:
    """All parameters in file order; their values are left in ``reading.values`` too."""
    table = reading.table("parameters", reading.data.get("parameters", {}))
    units: dict[str, str] = {}
    trees: dict[str, Node] = {}
    for name, given in table.items():
        key = f"parameters.{name}"
        if not reading.name(key, name):
            reading.broken.add(name)
            continue
        value_key, value = _value_of(reading, key, given)
        read = None if value is None else reading.number_or_tree(value_key, value)
        if read is None:
            reading.broken.add(name)
        elif isinstance(read, tuple):
            reading.values[name], units[name] = read
        else:
            trees[name] = read
    _evaluate(reading, trees)
    made = {name: _parameter(reading, name, given, units.get(name, "")) for name, given in table.items()}
    return {name: parameter for name, parameter in made.items() if parameter is not None}


def _value_of(reading: Reading, key: str, given: Any) -> tuple[str, Any]:
    if not isinstance(given, dict):
        return key, given
    reading.known_keys(key, given, _KEYS)
    if "value" not in given:
        reading.fault(key, "This parameter has no value.", "Give it one: { value = 1.0, ... }.")
    return f"{key}.value", given.get("value")


def _evaluate(reading: Reading, trees: Mapping[str, Node]) -> None:
    """Values of the formulas, each after what it needs."""
    needs = {name: [n.name for n in names_of(tree) if n.name in trees] for name, tree in trees.items()}
    order = TopologicalSorter(needs)
    try:
        order.prepare()
    except CycleError as error:
        _report_circle(reading, trees, error.args[1][::-1])
    # The sorter still gives every formula that hangs on no circle.
    while ready := order.get_ready():
        for name in ready:
            value = reading.evaluated(trees[name])
            if value is None:
                reading.broken.add(name)
            else:
                reading.values[name] = value
            order.done(name)
    reading.broken.update(trees.keys() - reading.values.keys())


def _report_circle(reading: Reading, trees: Mapping[str, Node], circle: list[str]) -> None:
    members = set(circle)
    first = next(name for name in trees if name in members)
    turned = circle[circle.index(first) : -1] + circle[: circle.index(first)] + [first]
    shown_part = turned if len(turned) <= 10 else [*turned[:9], "...", first]
    origin = trees[first].origin
    reading.fault(
        origin.key if origin else "", f"Parameters need each other in a circle: {' needs '.join(shown_part)}.",
        "Give one of them a number.",
    )  # fmt: skip


def _parameter(reading: Reading, name: str, given: Any, unit: str) -> Parameter | None:
    key = f"parameters.{name}"
    value = reading.values.get(name)
    if not isinstance(given, dict):
        return None if value is None else Parameter(name, value, unit=unit)
    if "unit" in given:
        unit = reading.string(f"{key}.unit", given["unit"], "the unit") or ""
        reading.whole_unit(f"{key}.unit", unit)
    tolerance = reading.tolerance(f"{key}.tolerance", given["tolerance"]) if "tolerance" in given else 0.0
    low, high = _range(reading, key, given, value)
    if value is None or tolerance is None:
        return None
    return Parameter(name, value, low, high, tolerance, unit)


def _range(reading: Reading, key: str, given: Mapping[str, Any], value: Fraction | None) -> tuple[Any, Any]:
    """Ends of an adjustable parameter, (None, None) where it is fixed or at fault."""
    ends = [end for end in ("from", "to") if end in given]
    if not ends:
        return None, None
    if len(ends) == 1:
        reading.fault(key, f'An adjustable parameter has "{ends[0]}" alone.', 'Give both "from" and "to".')
        return None, None
    low, high = reading.constant(f"{key}.from", given["from"]), reading.constant(f"{key}.to", given["to"])
    if low is None or high is None:
        return None, None
    if low >= high:
        reading.fault(f"{key}.to", '"to" is not above "from".', "Give the lower end first.")
    elif value is not None and not low <= value <= high:
        reading.fault(f"{key}.value", 'The value lies outside "from" to "to".', "Choose a value between them.")
    return low, high
