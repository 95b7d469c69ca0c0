"""Two resistors where one does not do: loops at a given speed, and the board that comes of it."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from itertools import combinations_with_replacement

import numpy as np
import pytest

from patchplan.equation.problem import Build
from patchplan.equation.reader import read_problem
from patchplan.errors import ProblemFaults
from patchplan.pipeline import plan
from patchplan.sizing.pairs import legs_to_pair, legs_with_pairs
from patchplan.sizing.records import Leg
from patchplan.sizing.series import values_between
from tests.sizing.test_size import sized
from tests.systems import lorenz


def test_a_leg_of_two_is_their_sum_or_their_parallel_value():
    assert Leg((1e3, 3e3), "series").transfer == pytest.approx(4e3)
    assert Leg((1e3, 3e3), "parallel").transfer == pytest.approx(750.0)
    assert Leg((1e3, 3e3), "parallel").into == Leg((1e3, 3e3), "parallel").load == pytest.approx(750.0)


@pytest.mark.parametrize("join", ["series", "parallel"])
def test_each_resistor_of_a_pair_has_its_own_share(join):
    """Shares against differences of the transfer itself."""
    leg = Leg((4.7e3, 33e3), join)
    for place, share in enumerate(leg.shares):
        moved = [r * (1.0 + 1e-6 * (i == place)) for i, r in enumerate(leg.resistors)]
        assert (Leg(tuple(moved), join).transfer / leg.transfer - 1.0) / 1e-6 == pytest.approx(share, rel=1e-5)


def test_the_list_of_pairs_is_complete():
    """Nearest entry to any value is as near as the best of all singles and pairs, one by one."""
    resistors = values_between("E24", 2e3, 1e5)
    choice = legs_with_pairs(resistors, False)
    made = np.array(
        [*resistors]
        + [a + b for a, b in combinations_with_replacement(resistors, 2)]
        + [a * b / (a + b) for a, b in combinations_with_replacement(resistors, 2)]
    )
    for wanted in np.geomspace(2.1e3, 1.5e5, 40):
        best = np.abs(np.log(made / wanted)).min()
        assert np.abs(choice.logs - np.log(wanted)).min() == pytest.approx(best, abs=1e-8)
    for k in range(0, len(choice.logs), 97):
        assert np.log(Leg(choice.parts[k], choice.join(k)).transfer) == pytest.approx(choice.logs[k], abs=1e-8)


def test_fewest_legs_take_up_the_loops():
    """Three loops; one leg that all of them share does for two errors alike, another for the third."""
    loops = np.array([[1.0, 1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    assert sorted(legs_to_pair(np.array([0.02, 0.02, -0.01]), loops, [], [0, 1, 2, 3], 1e-4)) == [0, 3]
    assert legs_to_pair(np.array([0.02, 0.02, 5e-5]), loops, [], [0, 1, 2, 3], 1e-4) == [0]


def test_pairs_bring_every_loop_into_line_at_a_given_speed():
    """Single E24 resistors leave more than 0.1 % at this speed, pairs less, and not every leg needs one."""
    made = replace(lorenz(), duration=Fraction(2))
    _, _, single = sized(made, speed=20.0, think="low")
    _, _, paired = sized(made, build=Build(pairs=True), speed=20.0, think="low")
    worst = [max(abs(e) for e in s.loop_errors) for s in (single, paired)]
    assert worst[1] < 1e-3 < worst[0]
    joins = [leg.join for stage in paired.stages.values() for leg in stage.legs]
    assert 0 < sum(map(bool, joins)) < len(joins)


TEXT = """equations = ["x'' = -0.37*x' - 1.93*x"]
duration = 10
[start]
x = 1
"x'" = 0
[build]
speed = 123
pairs = true
"""


def test_a_board_with_pairs_follows():
    """From the file to the check: both resistors of a pair on the board, each with its own tolerance."""
    found = plan(read_problem(TEXT))
    assert found.verdict.verdict == "follows"
    legs = {s.stage: s.legs for s in found.sizing.stages.values()}
    pairs = [(name, leg) for name, wires in legs.items() for leg in wires if leg.join]
    assert pairs
    for name, leg in pairs:
        placed = [p for p in found.circuit.parts if p.stage == name and p.value in leg.resistors]
        assert {p.value for p in placed} == set(leg.resistors)
        shared = set(placed[0].nets) & set(placed[1].nets)
        assert len(shared) == (1 if leg.join == "series" else 2)


def test_pairs_of_parts_on_hand_are_refused(tmp_path):

    (tmp_path / "stock.csv").write_text("value,count\n10k,20\n", encoding="utf-8")
    path = tmp_path / "p.toml"
    path.write_text(TEXT + 'resistors = "stock.csv"\n', encoding="utf-8")
    with pytest.raises(ProblemFaults, match="Pairs of resistors on hand"):
        read_problem(path)
