"""Settings of the adjustable parameters that a search begins with and moves to."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.stats import qmc

from patchplan.equation.problem import Build, Parameter
from patchplan.reach.field import field_of
from patchplan.reach.followed import Followed
from patchplan.reach.points import FULL, axis_points, box_points, first_points, parabola_points, steep_corners
from patchplan.reach.search import board_factors
from tests.systems import knob, system, term


def test_planes_rise_to_their_corners():
    points = np.random.default_rng(1).uniform(0, 1, (40, 3))
    heights = np.array([[1.0, -2.0, 3.0], [2.0, -1.0, 1.0], [-1.0, 1.0, 1.0]]) @ points.T + 5
    assert steep_corners(points, heights).tolist() == [[1, 0, 1], [0, 1, 1]]


def test_parabolas_find_the_top_of_a_hill():
    def hill(points):
        return np.array([1 - (points[:, 0] - 0.63) ** 2 - 2 * (points[:, 1] - 0.41) ** 2, points[:, 0] + points[:, 1]])

    points = np.array([[0.6, 0.5], [1.0, 0.9], [0.1, 0.1]])
    centres = hill(points).argmax(axis=1)
    near = np.concatenate((points, axis_points(points, hill(points), 20, 0.1)))
    found = parabola_points(near, hill(near), centres, 0.1)
    # The second row is a plane: at the end of the box it stays there, and goes on along the other axis.
    np.testing.assert_allclose(found, [[0.63, 0.41]], rtol=1e-9)
    assert [1.0, 1.0] in near.tolist()


def test_a_knob_of_several_parameters_gets_its_corners():
    names = [f"p{i}" for i in range(FULL.corners_up_to + 1)]
    made = system(
        {"x": 1}, {"x": [term(-1, "x", knobs=["k"])]}, knobs=[replace(knob("k", 1, 2, 3), parameters=("p1", "p4"))]
    )
    made = replace(made, adjustable=tuple(Parameter(n, Fraction(2), Fraction(1), Fraction(3)) for n in names))
    points = first_points(made)
    corners = {(a, b) for a, b in points[:, [1, 4]][np.isin(points, (0.0, 0.5, 1.0)).all(axis=1)]}
    assert corners >= {(0, 0), (0, 1), (1, 0), (1, 1)}


def test_products_and_sums_under_a_knob_are_followed():
    rate = [term(2, "x", knobs=["a"]), term(-1, "y", knobs=["a"]), term(3, "x", "y"), term(1, "y")]
    made = system({"x": 1, "y": 1}, {"x": rate, "y": [term(-1, "y")]}, knobs=[knob("a", 1, 2, 3)])
    field = field_of(made)
    x, y = np.array([[1.0, 2.0, 5.0], [3.0, -4.0, 0.5]])
    found = Followed(field).curves(np.array([x, y]), field.weights({"a": 2.0}))
    np.testing.assert_allclose(found, [x * y, 2 * (2 * x - y)])


def test_tolerances_of_parts_do_not_touch_changes_of_variables():
    plain = system({"x": 0, "v": 0}, {"x": [term(1, "v")], "v": [term(-1, "x")]}, signals={"z": [term(3, "x")]})
    changed = replace(plain, derived=("z",))
    field = field_of(plain)
    off, exact = (board_factors(s, field, Build()) for s in (plain, changed))
    (sums,) = field.signal_blocks
    assert (off[sums.terms] != 1).all()
    assert (exact[sums.terms] == 1).all()
    assert (exact[field.rate_block.terms] == off[field.rate_block.terms]).all()


@pytest.mark.parametrize("count", [1, 2, 5])
def test_the_sample_is_spread_over_the_box(count):
    corners, sample = 2**count, FULL.sample[count > 1]
    points = box_points(count, FULL)[corners:]
    # Every parameter takes the middle of each of as many equal parts as there are points, once.
    middles = (np.arange(sample) + 0.5) / sample
    np.testing.assert_allclose(np.sort(points, axis=0), np.repeat(middles[:, None], count, axis=1), rtol=1e-12)
    # The centred discrepancy of chance is far above (mean of ten draws).
    chance = [np.random.default_rng(i).uniform(size=points.shape) for i in range(10)]
    assert qmc.discrepancy(points) < 0.3 * np.mean([qmc.discrepancy(p) for p in chance])


def test_only_a_box_brings_in_the_statistics():
    code = (
        "import sys\nfrom patchplan.equation.explicit import build_system\n"
        "from patchplan.equation.problem import Build\n"
        "from patchplan.equation.reader import read_problem\nfrom patchplan.reach.reference import find_reach\n"
        'text = \'title = "T"\\nequations = ["x\\\' = -x^3 + u"]\\nduration = 1\\n[start]\\nx = 1\\n[inputs]\\n'
        "u = { within = [-1, 1] }\\n'\n"
        "find_reach(build_system(read_problem(text)), {}, Build())\nprint('scipy.stats' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
