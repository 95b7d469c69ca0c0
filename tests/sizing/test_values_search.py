"""Loops of the gains, and the search over many candidates at once."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from patchplan.equation.problem import Build
from patchplan.sizing.anneal import anneal, find_moves
from patchplan.sizing.crowd import Crowd, make_field
from patchplan.sizing.loops import find_circuits
from patchplan.sizing.losses import residual_of
from patchplan.sizing.model import Affine, Model, Ratio, matrix_of
from patchplan.sizing.values import choices_of, find_unknowns
from tests.sizing.test_size import gain, sized
from tests.systems import lorenz, system, term


def model_of(rows: list[dict[int, float]], *, clock: int | None = None) -> Model:
    """Rows of integrators with given slopes; one stage for each row."""
    columns = 1 + max(c for row in rows for c in row)
    ratios = tuple(Ratio(f"I{i}", 0, "integrator", Affine(-7.0 + 0.3 * i, row)) for i, row in enumerate(rows))
    speed = Affine(0.0, {clock: 1.0}) if clock is not None else Affine(0.0)
    return Model(ratios, {}, np.full(columns, -0.3), np.full(columns, 0.3), speed, {}, {})


#: A ring of four nodes with a chord, and a node that hangs on the reference.
RING = [{0: 1, 1: -1}, {1: 1, 2: -1}, {2: 1, 3: -1}, {3: 1, 0: -1}, {0: 1, 2: -1}, {4: 1}, {4: -1}]


@pytest.mark.parametrize("free", [False, True])
def test_loops_span_the_left_null_space(free):
    """As many as rows beyond the rank (numpy's SVD), independent, and no scale factor moves them."""
    rows = [{**row, 5: 1.0} for row in RING] if free else RING
    model = model_of(rows, clock=5 if free else None)
    matrix, _ = matrix_of(model)
    shares = find_circuits(model).dense(len(rows))
    assert np.abs(shares.T @ matrix).max() < 1e-12
    assert shares.shape[1] == len(rows) - np.linalg.matrix_rank(matrix) == np.linalg.matrix_rank(shares)


def test_short_loops_close_first():
    """Each of the ring's two halves closes over the chord; neither goes around the long way."""
    found = find_circuits(model_of(RING)).rows
    assert sorted(len(shares) for shares in found) == [2, 3, 3]


def crowd_of(think_of: int):
    """Candidates of the Lorenz board at random places."""
    from patchplan.form.records import Form
    from patchplan.patch.build import build_patch
    from patchplan.ranges import find_ranges
    from patchplan.reach.reference import find_reach
    from patchplan.sizing.model import build_model
    from patchplan.sizing.trial import _centre
    from patchplan.sizing.values import pick_stage_values, wanted_products

    made = replace(lorenz(), duration=Fraction(1))
    patch, target, _ = sized(made, think="low")
    form, reach = Form(made), find_reach(made, {}, Build())
    ranges = find_ranges(build_patch(form), form, reach)
    model = build_model(form, patch, ranges, target, (0.02, 0.05))
    unknowns = find_unknowns(model.ratios, model.feedback)
    wanted = wanted_products(model, model.centre)
    picked = pick_stage_values(model, target, wanted, {}, lambda: 0)
    choices = choices_of(unknowns, target, picked, _centre(model, unknowns, wanted, picked))
    circuits, (matrix, constant) = find_circuits(model), matrix_of(model)
    count, shares = len(circuits.rows), circuits.dense(len(constant))
    field = make_field(model, target, unknowns, choices, matrix, constant, shares, np.ones(count))
    random = np.random.default_rng(think_of)
    places = np.stack([random.integers(0, len(c.logs), 12) for c in choices], axis=1)
    return model, target, unknowns, choices, circuits, matrix, Crowd.at(field, places)


def test_moves_keep_the_loop_errors_of_the_parts():
    """After thousands of moves the errors carried along are those of the board's named parts, losses counted."""
    model, target, unknowns, choices, circuits, matrix, crowd = crowd_of(3)
    before = crowd.energy().min()
    moves = find_moves(crowd.field, unknowns.names, model.ratios, matrix, len(circuits.rows))
    anneal(crowd, moves, np.random.default_rng(4), 12, lambda place: False)
    assert crowd.energy().min() < before - 3.0
    for place, errors in zip(crowd.place, crowd.errors, strict=True):
        parts = {n: c.parts[k] for n, c, k in zip(unknowns.names, choices, place, strict=True)}
        np.testing.assert_allclose(np.expm1(-errors), circuits.errors(residual_of(model, target, parts)), atol=1e-9)


def oscillator():
    """x'' + 0.4*x' + x = 0 from x = 1."""
    return system({"x": 1, "x'": 0}, {"x": [term(1, "x'")], "x'": [term("-2/5", "x'"), term(-1, "x")]})


def test_loops_are_named_by_their_nodes():
    """The loop through both integrators sets the speed; only that of the damping is left."""
    _, _, sizing = sized(oscillator())
    assert [(loop.name, loop.absorbed) for loop in sizing.loops] == [("x_d → x_d", False), ("x_d → x → x_d", True)]
    assert sizing.loop_errors == (sizing.loops[0].error,)


def test_a_loop_error_is_what_the_parts_make_of_the_damping():
    """The damping of x'' + d*x' + x = 0 is R*C of the loop over R*C of its own wire: the loop's error is its error."""
    patch, target, sizing = sized(oscillator())
    own, around = [], []
    for stage in (s for s in patch.stages if s.kind == "integrator"):
        for index, wire in enumerate(stage.wires):
            (own if wire.source == stage.node else around).append(gain(stage, index, sizing, target))
    assert (len(own), len(around)) == (1, 2)
    realised = own[0] / np.sqrt(np.prod(around))
    # Finite bandwidth, which the loop counts, slows both stages by a few parts in a million.
    assert realised == pytest.approx(0.4 * (1 + sizing.loop_errors[0]), rel=2e-5)
