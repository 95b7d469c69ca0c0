"""From the Form to stages and wires."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import TypeAlias

from patchplan.equation.system import Knob, Row, System, Term, level_of
from patchplan.equation.tree import Origin
from patchplan.form.records import Form
from patchplan.patch.factors import factored
from patchplan.patch.naming import REFERENCE, Names, key_of, shortened, sum_text
from patchplan.patch.products import plan_products
from patchplan.patch.records import Patch, Stage, Wire
from patchplan.patch.signs import Link, Signs, choose_signs
from patchplan.patch.signs_products import Product, choose_signs_of_products
from patchplan.patch.signs_ties import lag_weight

_LETTERS = {"integrator": "I", "summer": "S", "inverter": "N", "multiplier": "M", "source": "V"}
#: Key of what is taken, coefficient, place in the file.
_Input: TypeAlias = tuple[str, Fraction, Origin | None]


@dataclass
class _Draft:
    """A stage while it is drawn up: inputs are (key of the source, coefficient); keys are unique signal texts."""

    key: str
    kind: str
    inputs: list[_Input] = field(default_factory=list)
    start: Fraction = Fraction(0)
    knob: Knob | None = None
    origin: Origin | None = None

    @property
    def bipolar(self) -> bool:
        """Whether the knob's range crosses zero."""
        return self.knob is not None and self.knob.low < 0 < self.knob.high


def build_patch(
    form: Form, *, hold: bool = True, node_limit: int = 2000, factoring: bool = True, summers: Collection[str] = (),
    differential: bool = True,
) -> Patch:  # fmt: skip
    """Draw the patch of a Form.

    Parameters
    ----------
    form
        The equations in board variables.
    hold
        Whether start values are set from the reference (a run that is reset); they then ask for its polarities.
    node_limit
        Of the search for the fewest sign stages.
    factoring
        Whether sums may be taken out as factors where that saves multipliers.
    summers
        Inputs of integrators, as ``x<-x*y``, that a summer takes first; all of one integrator share the summer.
    differential
        Whether multipliers have differential inputs, which give a product in either polarity.
    """
    drafts, factors = _drafts(form.system, factoring)
    _put_in_front(drafts, summers)
    signs = _signs(form, drafts, hold, node_limit, differential)
    return replace(_assemble(form, drafts, signs, hold, differential), factors=factors)


def _drafts(system: System, factoring: bool) -> tuple[dict[str, _Draft], tuple[str, ...]]:
    """All stages but those that only turn a sign, by key, sources first; and keys of sums taken out as factors."""
    rows, knob_stages = _take_out_knobs((*system.rows, *system.signals))
    drafts = _given(system, (*rows, *(row for row, _ in knob_stages)))
    sums: list[Row] = []
    reused: list[str] = []
    if factoring:
        before = [*rows, *(row for row, _ in knob_stages)]
        known = rows[len(system.rows) :]
        changed, sums = factored(before, known)
        reused = [row.name for row in known if _multiplied(row.name, [*changed, *sums]) > _multiplied(row.name, before)]
        rows = changed[: len(rows)]
        knob_stages = [(row, knob) for row, (_, knob) in zip(changed[len(rows) :], knob_stages, strict=True)]
    _draw(system, drafts, rows, knob_stages, sums)
    return drafts, (*(row.name for row in sums), *reused)


def _multiplied(name: str, rows: Iterable[Row]) -> int:
    """Number of products that take a signal."""
    return sum(t.degree > 1 and any(n == name for n, _ in t.factors) for row in rows for t in row.terms)


def _given(system: System, rows: Iterable[Row]) -> dict[str, _Draft]:
    """Reference, and sources that the rows use or that are watched."""
    needed = {n for row in rows for t in row.terms for n, _ in t.factors} | {name for name, _ in system.watch}
    drafts = {REFERENCE: _Draft(REFERENCE, "reference")}
    return drafts | {s.name: _Draft(s.name, "source") for s in system.sources if s.name in needed}


def _draw(
    system: System,
    drafts: dict[str, _Draft],
    rows: Sequence[Row],
    knob_stages: Sequence[tuple[Row, str]],
    sums: Sequence[Row],
) -> None:
    """Add integrators, multipliers and summers."""
    knobs = {k.name: k for k in system.knobs}
    states = {s.name: s for s in system.states}
    terms = [t for r in (*rows, *(row for row, _ in knob_stages), *sums) for t in r.terms]
    for row in rows[: len(system.rows)]:
        drafts[row.name] = _Draft(row.name, "integrator", _inputs(row), states[row.name].start, origin=row.origin)
    for made, left, right in plan_products(t.factors for t in terms):
        pair: list[_Input] = [(key_of(left), Fraction(1), None), (key_of(right), Fraction(1), None)]
        drafts[key_of(made)] = _Draft(key_of(made), "multiplier", pair)
    for row, knob in knob_stages:
        drafts[row.name] = _Draft(row.name, "summer", _inputs(row), knob=knobs[knob], origin=row.origin)
    for row in (*sums, *rows[len(system.rows) :]):
        drafts[row.name] = _Draft(row.name, "summer", _inputs(row), origin=row.origin)
    for draft in [d for d in drafts.values() if d.bipolar]:
        _feed_both_ends(draft, drafts)


def _put_in_front(drafts: dict[str, _Draft], summers: Collection[str]) -> None:
    """Let a summer take the inputs named, so that the integrator sees them with fewer and less different gains."""
    for draft in [d for d in drafts.values() if d.kind == "integrator"]:
        taken = [part for part in draft.inputs if f"{draft.key}<-{part[0]}" in summers]
        if taken:
            key = f"front of {draft.key}"
            drafts[key] = _Draft(key, "summer", taken, origin=draft.origin)
            draft.inputs = [*(part for part in draft.inputs if part not in taken), (key, Fraction(1), draft.origin)]


def _inputs(row: Row) -> list[_Input]:
    return [(key_of(t.factors), t.coefficient, t.origin) for t in row.terms]


def _take_out_knobs(rows: Iterable[Row]) -> tuple[list[Row], list[tuple[Row, str]]]:
    """Replace each group of terms under one knob by that knob's stage.

    Groups that are multiples of each other share the stage, so that one knob serves them all.

    Returns
    -------
    tuple of list
        Rows without knobs, and (row, knob) of the knob stages, named ``knob*(sum)``, inner ones first.
    """
    stages: dict[str, tuple[Row, str]] = {}

    def strip(row: Row) -> Row:
        plain = [t for t in row.terms if not t.knobs]
        groups: dict[str, list[Term]] = {}
        for term in row.terms:
            if term.knobs:
                inner = replace(term, knobs=term.knobs[1:])
                groups.setdefault(term.knobs[0], []).append(inner)
        for name, terms in groups.items():
            lead = terms[0].coefficient
            scaled = tuple(replace(t, coefficient=t.coefficient / lead) for t in terms)
            body = strip(Row("", scaled))
            key = f"{name}*({sum_text(body.terms)})"
            stages.setdefault(key, (Row(key, body.terms, terms[0].origin), name))
            plain.append(Term(lead, ((key, 1),), (), terms[0].origin))
        return Row(row.name, tuple(plain), row.origin)

    stripped = [strip(row) for row in rows]
    return stripped, list(stages.values())


def _feed_both_ends(draft: _Draft, drafts: dict[str, _Draft]) -> None:
    """Give a knob that crosses zero one node to span, so that its inverter can hold the other end."""
    if len(draft.inputs) > 1 or draft.inputs[0][1] != 1:
        inner = f"({draft.key})/{draft.knob.name if draft.knob else ''}"
        drafts[inner] = _Draft(inner, "summer", draft.inputs, origin=draft.origin)
        draft.inputs = [(inner, Fraction(1), draft.origin)]


def _signs(form: Form, drafts: Mapping[str, _Draft], hold: bool, node_limit: int, differential: bool) -> Signs:
    """Polarity of every node, from the links that inverting stages impose."""
    links, forced = [], []
    for draft in drafts.values():
        if draft.bipolar:
            forced.append(draft.inputs[0][0])
        elif draft.kind in ("integrator", "summer"):
            turn = draft.knob.sign if draft.knob is not None else 1
            links += [Link(draft.key, k, (turn if c > 0 else -turn)) for k, c, _ in draft.inputs]
        if hold and draft.kind == "integrator" and draft.start:
            links.append(Link(draft.key, REFERENCE, 1 if draft.start > 0 else -1, is_start=True))
    duration = float(form.system.duration)
    for source in form.system.sources:
        # A switched step stands at the reference while it is on: the other polarity asks for the other reference.
        level = level_of(source, duration)
        if source.name in drafts and source.name not in form.scales and level:
            links.append(Link(source.name, REFERENCE, -1 if level > 0 else 1, is_start=True))
    fixed = {REFERENCE: 1, **{n: (1 if s > 0 else -1) for n, s in form.scales.items() if n in drafts}}
    fixed |= {name: polarity for name, polarity in form.system.watch if polarity and name in drafts}
    inputs = {key: [(k, c) for k, c, _ in draft.inputs] for key, draft in drafts.items()}
    products = [Product(d.key, d.inputs[0][0], d.inputs[1][0]) for d in drafts.values() if d.kind == "multiplier"]
    if products and not differential:
        return choose_signs_of_products(list(drafts), links, products, fixed, forced, node_limit=node_limit)
    integrators = frozenset(key for key, draft in drafts.items() if draft.kind == "integrator")

    def weight(target: str, source: str) -> float:
        return lag_weight(target, source, inputs, integrators)

    return choose_signs(list(drafts), links, fixed, forced, node_limit=node_limit, lag_weight=weight)


class _Board:
    """Stages as they are numbered and wired."""

    def __init__(self, drafts: Mapping[str, _Draft], signs: Signs, differential: bool) -> None:
        names = self._names = Names()
        self.signs, self.differential = signs, differential
        self.stages: list[Stage] = []
        self._counts: dict[str, int] = {}
        self.node = {key: "ref" if key == REFERENCE else names.node(_node_wish(d)) for key, d in drafts.items()}
        self.sign = {self.node[key]: signs.sign[key] for key in drafts}
        for key in (k for k in drafts if k in signs.inverted):
            self.node[f"-{key}"] = names.node(f"{self.node[key]}_n")
            self.sign[self.node[f"-{key}"]] = -signs.sign[key]

    def add(self, kind: str, at: str, signal: str, wires: Iterable[Wire] = (), draft: _Draft | None = None) -> None:
        """Number a stage and keep it."""
        self._counts[kind] = number = self._counts.get(kind, 0) + 1
        name = f"{_LETTERS[kind]}{number}" if kind in _LETTERS else "REF"
        stage = Stage(name, kind, at, signal, self.sign[at], tuple(wires))
        if draft is not None:
            knob = draft.knob.name if draft.knob else None
            stage = replace(stage, start=draft.start, knob=knob, bipolar=draft.bipolar, origin=draft.origin)
        self.stages.append(stage)

    def place(self, key: str, draft: _Draft) -> None:
        """Place one drafted stage, with the summer in front of it or the inverter behind it that its signs need."""
        at = self.node[key]
        if draft.kind in ("integrator", "summer") and not draft.bipolar:
            wires, turned = self._wires(draft, at)
            if turned:
                front = self._names.node(f"{at}_s")
                self.sign[front] = -self.sign[at]
                self.add("summer", front, f"part of {key}", turned)
                wires.append(Wire(front, Fraction(1)))
        elif draft.kind == "multiplier":
            wires = [Wire(node, Fraction(1)) for node in self._factors(draft, at)]
        else:
            wires = [Wire(self.node[k], c, o) for k, c, o in draft.inputs]
            if draft.bipolar:
                wires.append(Wire(self.node[f"-{draft.inputs[0][0]}"], Fraction(1)))
        self.add(draft.kind, at, key, wires, draft)
        if key in self.signs.inverted:
            self.add("inverter", self.node[f"-{key}"], key, [Wire(at, Fraction(1))])

    def _factors(self, draft: _Draft, at: str) -> list[str]:
        """Nodes that a multiplier takes: one of them inverted where its product would have the wrong polarity."""
        keys = [k for k, _, _ in draft.inputs]
        nodes = [self.node[k] for k in keys]
        if not self.differential and self.sign[at] * self.sign[nodes[0]] * self.sign[nodes[1]] < 0:
            place = 0 if keys[0] in self.signs.inverted else 1
            nodes[place] = self.node[f"-{keys[place]}"]
        return nodes

    def _wires(self, draft: _Draft, at: str) -> tuple[list[Wire], list[Wire]]:
        """Wires that fit as they are, and those that need an inverting summer in front."""
        direct: list[Wire] = []
        turned: list[Wire] = []
        knob_sign = draft.knob.sign if draft.knob is not None else 1
        for key, coefficient, origin in draft.inputs:
            wire = Wire(self.node[key], coefficient, origin)
            right = coefficient * knob_sign * self.sign[at] * self.sign[wire.source] < 0
            if not right and key in self.signs.inverted:
                wire, right = replace(wire, source=self.node[f"-{key}"]), True
            (direct if right else turned).append(wire)
        return direct, turned


def _assemble(form: Form, drafts: Mapping[str, _Draft], signs: Signs, hold: bool, differential: bool) -> Patch:
    """Number the stages, put in the sign stages and draw the wires."""
    board = _Board(drafts, signs, differential)
    switched = {s.name for s in form.system.sources if not s.external and s.name not in form.scales}
    for key, draft in drafts.items():
        if key != REFERENCE or _reference_used(drafts, hold, switched):
            board.place(key, draft)
    system = form.system
    watched = {name.removesuffix(".out"): board.node[name] for name, _ in system.watch}
    sources = {s.name: s for s in system.sources if s.name in drafts}
    turning = len(signs.inverted) + sum(s.signal.startswith("part of ") for s in board.stages)
    knobs = {k.name: k for k in system.knobs}
    return Patch(
        _ordered(board.stages), watched, sources, knobs, turning, signs.lower_bound, not signs.proved,
        differential=differential,
    )  # fmt: skip


def _reference_used(drafts: Mapping[str, _Draft], hold: bool, switched: Collection[str]) -> bool:
    return any(
        (d.kind == "source" and d.key in switched)
        or (hold and d.kind == "integrator" and d.start)
        or any(k == REFERENCE for k, _, _ in d.inputs)
        for d in drafts.values()
    )


def _node_wish(draft: _Draft) -> str:
    if draft.kind == "multiplier":
        return shortened("p_" + draft.key)
    if draft.kind == "summer" and draft.knob is not None:
        return f"k_{draft.knob.name}"
    if draft.key.startswith("("):
        return shortened(f"s{draft.key}")
    return draft.key


def _ordered(stages: list[Stage]) -> tuple[Stage, ...]:
    """Reference, sources and integrators first, then every other stage after those that feed it."""
    done = [s for s in stages if s.kind in ("reference", "source", "integrator")]
    ready = {s.node for s in done}
    rest = [s for s in stages if s.node not in ready]
    while rest:
        now = [s for s in rest if all(w.source in ready for w in s.wires)]
        done += now
        ready |= {s.node for s in now}
        rest = [s for s in rest if s.node not in ready]
    order = {"reference": 0, "source": 1, "integrator": 2}
    return tuple(sorted(done, key=lambda s: order.get(s.kind, 3)))
