"""Places of values in TOML text, against the standard library's reader."""

from __future__ import annotations

import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from patchplan.equation.spans import raw_offset, scan

GOOD = """equations = ["x' = -a*x + u"]
duration = 2
[parameters]
a = 1.5
[inputs]
u = "sin(t)"
[start]
x = 0
"""


def leaves(value, key=""):
    if isinstance(value, dict):
        for name, item in value.items():
            yield from leaves(item, f"{key}.{name}" if key else name)
    elif isinstance(value, list):
        for index, item in enumerate(value):
            yield from leaves(item, f"{key}[{index}]")
    else:
        yield key, value


# The standard library's TOML reader is the judge: the text inside each span must stand for the value it reads.
@pytest.mark.parametrize(
    "text",
    [
        GOOD,
        "a.b.c = 1 # x\n[d . 'e f']\n\"g\\u0041\" = [1, [2, 3,], # [\n {h = 'i', j.k = \"\"}]\n",
        "[[p]]\nq = 1\n[[p]]\nq = 2\n[p.r]\ns = 3\n",
        'm = """\na "quoted"" \\"""\nb""""\nn = \'\'\'x\'\'\'\'\no = 1979-05-27 07:32:00 # c\np = [\n  "#", # ]\n]\n',
        "e = []\nf = {}\ng = -inf\nh = 0xff\n",
    ],
)
def test_spans_agree_with_tomllib(text):
    layout = scan(text)
    for key, value in leaves(tomllib.loads(text)):
        start, end = layout.values[key]
        assert tomllib.loads(f"v = {text[start:end]}")["v"] == value


@given(st.text(alphabet='ab\\"\n\té', max_size=12), st.integers(0, 12))
def test_offsets_inside_strings(inside, position):
    raw = (
        '"'
        + "".join({"\n": "\\n", "\t": "\\t", "é": "\\u00e9"}.get(c, f"\\{c}" if c in '\\"' else c) for c in inside)
        + '"'
    )
    assert tomllib.loads(f"v = {raw}")["v"] == inside
    position = min(position, len(inside))
    at = raw_offset(raw, position)
    assert tomllib.loads(f'v = {raw[:at]}"')["v"] == inside[:position]
