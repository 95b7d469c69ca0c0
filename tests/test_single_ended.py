"""A plan on multipliers whose second input pins do not exist."""

from __future__ import annotations

from patchplan.circuit.records import GROUND
from patchplan.form.records import Form
from patchplan.patch.build import build_patch
from patchplan.patch.read_back import read_back
from tests.plans import Plans


def test_multipliers_take_one_node_at_each_input(plans: Plans) -> None:
    plan = plans.of("single_ended")
    assert plan.verdict.verdict == "follows"
    assert plan.circuit is not None
    made = [p for p in plan.circuit.parts if p.kind == "multiplier"]
    assert len(made) == 2
    for part in made:
        x1, x2, y1, y2, _, w = part.nets
        nodes = plan.circuit.nodes
        assert (x2, y2) == (GROUND, GROUND)
        assert nodes[w].sign == nodes[x1].sign * nodes[y1].sign


def test_its_signs_cost_what_they_must(plans: Plans) -> None:
    """The reference + asks for x as -x, and x for x^2 as -x^2: none with differential inputs, else an inverter."""
    plan = plans.of("single_ended")
    free = build_patch(Form(plan.form.system))
    assert plan.patch.sign_stages == plan.patch.sign_stages_lower_bound > free.sign_stages
    rows = read_back(plan.patch, ())
    assert [rows[row.name] for row in plan.form.system.rows] == list(plan.form.system.rows)
