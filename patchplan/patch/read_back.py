"""The patch turned into equations again: what the wiring computes, exactly."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import replace
from fractions import Fraction

from patchplan.equation.system import Monomial, Row, Term, row_of
from patchplan.patch.products import times
from patchplan.patch.records import Patch, Stage


def read_back(patch: Patch, kept: Collection[str]) -> Mapping[str, Row]:
    """Rows of the states and of the kept signals, computed from stages, wires and signs alone.

    Parameters
    ----------
    patch
        The wiring.
    kept
        Names of algebraic signals that stand for themselves when other stages take them.

    Raises
    ------
    ValueError
        Where a stage does not invert its inputs, a multiplier cannot give its product's sign, or a wire comes from
        nowhere.
    """
    polynomials: dict[str, tuple[Term, ...]] = {}
    rows: dict[str, Row] = {}
    sign = {s.node: s.sign for s in patch.stages}
    for stage in patch.stages:
        if stage.kind in ("reference", "source", "integrator"):
            factors: Monomial = () if stage.kind == "reference" else ((stage.signal, 1),)
            polynomials[stage.node] = (Term(Fraction(1), factors),)
    for stage in patch.stages:
        if stage.kind in ("reference", "source", "integrator"):
            continue
        terms = _terms(stage, patch, polynomials, sign)
        polynomials[stage.node] = terms
        if stage.signal in kept and stage.kind != "inverter":
            rows[stage.signal] = row_of(stage.signal, terms)
            polynomials[stage.node] = (Term(Fraction(1), ((stage.signal, 1),)),)
    for stage in patch.stages:
        if stage.kind == "integrator":
            rows[stage.signal] = row_of(stage.signal, _terms(stage, patch, polynomials, sign))
    return rows


def _terms(
    stage: Stage, patch: Patch, polynomials: Mapping[str, tuple[Term, ...]], sign: Mapping[str, int]
) -> tuple[Term, ...]:
    """What a stage makes of the polynomials at its inputs."""
    missing = [w.source for w in stage.wires if w.source not in polynomials]
    if missing:
        raise ValueError(f"stage {stage.name} takes {missing[0]}, which no stage drives before it")
    if stage.kind == "multiplier":
        if not patch.differential and stage.sign * sign[stage.wires[0].source] * sign[stage.wires[1].source] < 0:
            raise ValueError(f"stage {stage.name} cannot turn the sign of its product")
        left, right = (polynomials[w.source] for w in stage.wires)
        both = [
            Term(a.coefficient * b.coefficient, times(a.factors, b.factors), tuple(sorted(a.knobs + b.knobs)))
            for a in left
            for b in right
        ]
        return row_of("", both).terms
    knob = patch.knobs[stage.knob] if stage.knob else None
    turn = knob.sign if knob is not None else 1
    wires = stage.wires[:1] if stage.bipolar else stage.wires
    terms: list[Term] = []
    for wire in wires:
        if not stage.bipolar and wire.coefficient * turn * stage.sign * sign[wire.source] >= 0:
            raise ValueError(f"stage {stage.name} does not invert its input {wire.source}")
        for term in polynomials[wire.source]:
            knobs = tuple(sorted((*term.knobs, *((stage.knob,) if stage.knob else ()))))
            terms.append(replace(term, coefficient=wire.coefficient * term.coefficient, knobs=knobs))
    return row_of("", terms).terms
