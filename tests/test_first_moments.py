"""A node that is over its limit only in the first moments of a run is named with its time."""

from __future__ import annotations

import numpy as np
import pytest

from patchplan.equation.reader import read_problem
from patchplan.pipeline import plan

# x' is t exp(-t): above 0.1 from 0.11183 to 3.57715 (the two branches of Lambert's W at -0.1, scipy.special.lambertw).
STEP = """title = "Step into a filter"
equations = ["x'' = -2*x' - x + step(t)"]
duration = {duration}
watch = ["x"]
[start]
x = 0
"x'" = 0
[ranges]
"x'" = [-0.1, 0.1]
"""


@pytest.fixture(scope="module")
def short():
    return plan(read_problem(STEP.format(duration=100)))


def test_the_reach_names_the_time(short):
    (said,) = [w for w in short.reach.warnings if "is stated to stay" in w]
    assert "It is outside only at first" in said
    begin, end = (float(x.rstrip(".")) for x in said.split("from t = ")[1].split(" to "))
    # The grid's rows lie some hundredths apart.
    assert begin == pytest.approx(0.11183, abs=0.1)
    assert end == pytest.approx(3.57715, abs=0.1)


def test_the_verdict_names_the_time(short):
    assert short.verdict.verdict == "overload"
    over = [n for n in short.verdict.nodes if not n.ok]
    assert {short.circuit.nodes[n.node].signal for n in over} == {"x'"}
    for node in over:
        volts = np.abs(short.verdict.volts[node.node])
        clipped = short.verdict.times[volts > node.limit_volts * (1 + 1e-6)]
        assert (node.over_from, node.over_until) == (clipped[0], clipped[-1])
        assert 0 < node.over_until < 0.1 * short.circuit.duration
        assert "It clips only in the first " in node.cause


def test_a_node_that_is_over_for_long_is_not_called_so():
    long = plan(read_problem(STEP.format(duration=8)))
    assert long.verdict.verdict == "overload"
    assert not any("only in the first" in n.cause for n in long.verdict.nodes)
    assert not any("only at first" in w for w in long.reach.warnings)
