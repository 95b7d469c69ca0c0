"""The block in s against scipy.signal."""

import numpy as np
import pytest
from scipy import signal

from patchplan.errors import ProblemFaults
from tests.equation.simulated import built


def state_space(system, source):
    """Matrices of a linear system from one source to the signal y."""
    names = [s.name for s in system.states]

    def split(row):
        table = {t.factors[0][0]: float(t.coefficient) for t in row.terms}
        return [table.get(n, 0.0) for n in names], table.get(source, 0.0)

    a, b = zip(*(split(r) for r in system.rows), strict=True)
    output = next((r for r in system.signals if r.name == "y"), None)
    c, d = split(output) if output else ([float(n == "y") for n in names], 0.0)
    return np.array(a), np.array(b)[:, None], np.array(c)[None, :], np.array([[d]])


@pytest.mark.parametrize(
    ("block", "numerator", "denominator"),
    [
        ("(s + 3)/(s^2 + 2*s + 9) * u", [1, 3], [1, 2, 9]),
        ("u*(2*s^2 + 3)/(s^2 + 2*s + 9)", [2, 0, 3], [1, 2, 9]),
        ("-5*u/(4*s + 1)/(s + a)", [-5], [4, 4 * 7 + 1, 7]),
        ("(s - 1)*u/((s + 1)*(s + 2)^2)", [1, -1], np.poly([-1, -2, -2])),
        ("u/s^3", [1], [1, 0, 0, 0]),
    ],
)
def test_the_realised_block_has_the_transfer_function_written(block, numerator, denominator):
    parameters = "a = 7" if "a" in block else ""
    system = built([f"y = {block}"], inputs="u = { within = [-1, 1] }", parameters=parameters)
    assert all(s.start == 0 for s in system.states)
    assert len(system.states) == len(denominator) - 1
    w = np.logspace(-1, 2, 40)
    a, b, c, d = state_space(system, "u")
    found = [(c @ np.linalg.solve(1j * x * np.eye(len(a)) - a, b) + d).item() for x in w]
    expected = signal.freqs(numerator, denominator, w)[1]
    assert np.allclose(found, expected, rtol=1e-9)


def test_a_block_may_close_a_loop():
    system = built(["y = 2/(s + 1) * e", "e = r - x", "x' = y"], start="x = 0", inputs="r = { within = [-1, 1] }")
    a = state_space(system, "r")[0]
    assert np.allclose(np.poly(a), [1, 1, 2])


def test_s_is_an_ordinary_name_where_the_file_has_it():
    assert [s.name for s in built(["s' = -s"], start="s = 1").states] == ["s"]


@pytest.mark.parametrize(
    ("equations", "words"),
    [
        (["y = s*u"], "improper"),
        (["y = (s^2 + 1)/(s + 1)*u"], "improper"),
        (["y = 1/(s + 1)*u + 1/(s + 2)*u"], "more than one block"),
        (["y = 1/(s + 1)*(u + 1/(s + 2)*u)"], "inside another"),
        (["y = 1/(s + 1)*u", "z = 1/(s + 2)*y"], "second block"),
        (["y = 1/(s + y)*u"], "inside another"),
        (["2*y = 1/(s + 1)*u"], "left side"),
    ],
)
def test_what_is_beyond_one_proper_block_is_refused(equations, words):
    with pytest.raises(ProblemFaults, match=words):
        built(equations, inputs="u = { within = [-1, 1] }")


def test_a_block_starts_at_rest():
    with pytest.raises(ProblemFaults, match="starts at rest"):
        built(["y = 1/(s + 1)*u"], inputs="u = { within = [-1, 1] }", start="y = 1")
