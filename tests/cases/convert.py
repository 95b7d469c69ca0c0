"""Turns a reference case into the text of a problem file."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

Case = dict[str, Any]

#: Cases with functions of states, with the function that the refusal must name.
FUNCTIONS_OF_STATES = {
    "detest_D1_two_body_ecc_0p1": "root",
    "pendulum_1rad_one_period": "sin",
    "gompertz_growth_log": "log",
    "diode_rc_forced": "exp",
}


def read_cases() -> dict[str, Case]:
    """All cases by name, in file order."""
    text = Path(__file__).with_name("visible.json").read_text(encoding="utf-8")
    return {case["name"]: case for case in json.loads(text)["cases"]}


def problem_text(case: Case) -> str:
    """Problem file that states the case: every state and output is watched over the whole of ``t_end``."""
    outputs = case.get("outputs", {})
    equations = [*case["equations"], *(f"{name} = {formula}" for name, formula in outputs.items())]
    lines = [
        f"# Source: {case['source']}",
        f"title = {_value(case['name'])}",
        "equations = [",
        *(f"  {_value(equation)}," for equation in equations),
        "]",
        f"duration = {_value(case['t_end'])}",
        f"watch = {_value(watched_names(case))}",
    ]
    for table, content in (("parameters", case["parameters"]), ("start", case["initial"])):
        if content:
            lines += ["", f"[{table}]", *(f"{_value(name)} = {_value(value)}" for name, value in content.items())]
    return "\n".join(lines) + "\n"


def watched_names(case: Case) -> list[str]:
    """States (derivatives included) and outputs that the case has samples of."""
    reference = case["reference"]
    return [*reference["samples"], *reference.get("outputs_at_sample_times", {})]


def _value(value: object) -> str:
    # A JSON string, number or list of them is a TOML value too; quoted keys are valid for any name.
    return json.dumps(value)
