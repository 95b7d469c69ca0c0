"""A System with some of its linear blocks in other states, and the new states as signals of the old ones."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import TypeVar

from patchplan.equation.system import Row, State, System, Term, row_of
from patchplan.form.blocks import Block, find_blocks
from patchplan.form.exact import Vector, dot, observability, short
from patchplan.form.realise import AS_WRITTEN, DRIVE, Realisation, realise

Item = TypeVar("Item")


@dataclass(frozen=True)
class Rewritten:
    """What a change of states makes.

    Attributes
    ----------
    system
        The equations in the new states.
    extended
        The equations as written, with every new state and sum as one more signal: what these do over a run is found
        from the problem itself.
    notes
        A sentence for each block, and for each that has to stay as written.
    sums
        New states by the states as written: name -> weights.
    """

    system: System
    extended: System
    notes: tuple[str, ...] = ()
    sums: Mapping[str, Mapping[str, Fraction]] = field(default_factory=dict)


def with_forms(system: System, forms: Mapping[str, str]) -> Rewritten:
    """The System with each block in the form asked for; blocks that are not named stay as written.

    Parameters
    ----------
    forms
        Name of a block's output -> one of :data:`patchplan.form.realise.FORMS`.

    Raises
    ------
    ValueError
        Where there is no such block, or it can't take the form.
    """
    found = find_blocks(system)
    blocks = {block.name: block for block in found.blocks}
    changes = []
    for name, form in forms.items():
        if form == AS_WRITTEN:
            continue
        if name not in blocks:
            raise ValueError(f"{name} is the output of no linear block; there are {', '.join(blocks) or 'none'}.")
        made = realise(blocks[name], form)
        if isinstance(made, str):
            raise ValueError(f"{name} can't be built as {form}. {made}")
        changes.append((blocks[name], made))
    made_over = rewrite(system, changes)
    return replace(made_over, notes=(*found.notes, *made_over.notes))


def rewrite(system: System, changes: Iterable[tuple[Block, Realisation]]) -> Rewritten:
    """Put blocks into other states.

    Start values follow; states of the block that others need or that are watched become sums of the new ones, or one of
    the new ones where that is the same.
    """
    written = extended = system
    put_in: dict[str, tuple[Term, ...]] = {}
    notes = []
    sums: dict[str, Mapping[str, Fraction]] = {}
    for block, made in changes:
        made = _with_known_names(block, made)
        inner = _drive(block, made)
        outputs = _outputs(block, made)
        kept = {name: terms for name, terms in outputs.items() if _is_kept(name, system, block)}
        put_in |= {name: terms for name, terms in outputs.items() if name not in kept}
        extended = _extended(extended, block, made, inner)
        written = _replaced(written, block, made, inner, kept)
        weights = zip(made.states, made.change, strict=True)
        sums |= {n: dict(zip(block.states, row, strict=True)) for n, row in weights if n not in block.states}
        notes.append(f"{block.name} is built in the form {made.form} ({made.said}) instead of the companion form.")
    if put_in:
        # At the end, as the drive of one block may hold what another one gives.
        rows, signals = ([_put(row, put_in) for row in part] for part in (written.rows, written.signals))
        written = replace(written, rows=tuple(rows), signals=_in_order(signals))
    return Rewritten(written, extended, tuple(notes), sums)


def _with_known_names(block: Block, made: Realisation) -> Realisation:
    """Let states that are a needed state of the block, or a multiple of one, be that one."""
    matrix, _, over, _ = made.open_rows()
    seen = observability(over[made.outlet.name], matrix)
    known: dict[str, tuple[str, Fraction]] = {}
    for name in block.needed:
        row = seen[block.states.index(name)]
        same = [k for k, c in enumerate(row) if c]
        if len(same) == 1 and made.states[same[0]] not in known:
            known[made.states[same[0]]] = name, row[same[0]]

    def renamed(row: Row) -> Row:
        name, size = known.get(row.name, (row.name, Fraction(1)))
        terms = []
        for term in row.terms:
            inner, factor = known.get(term.factors[0][0], (term.factors[0][0], Fraction(1)))
            terms.append(_linear(short(term.coefficient * size / factor), inner))
        return row_of(name, terms, row.origin)

    outlet = replace(renamed(replace(made.outlet, name="")), name=made.outlet.name)
    rows, signals = tuple(map(renamed, made.rows)), tuple(map(renamed, made.signals))
    sizes = [known.get(name, (name, Fraction(1)))[1] for name in made.states]
    change = tuple(tuple(short(size * x) for x in row) for size, row in zip(sizes, made.change, strict=True))
    states = tuple(row.name for row in rows)
    return replace(made, states=states, rows=rows, signals=signals, outlet=outlet, change=change)


def _drive(block: Block, made: Realisation) -> tuple[tuple[Term, ...], Row | None]:
    """What stands for the drive: its terms, or a sum of its own where several rows would each take several terms."""
    uses = sum(t.factors[0][0] == DRIVE for row in (*made.rows, *made.signals, made.outlet) for t in row.terms)
    if len(block.drive) <= 1 or uses <= 1:
        return block.drive, None
    name = f"{block.name}.in"
    return (Term(Fraction(1), ((name, 1),), (), block.drive[0].origin),), row_of(name, block.drive)


def _outputs(block: Block, made: Realisation) -> dict[str, tuple[Term, ...]]:
    """Needed states of the block by the new ones, those left out that are new ones."""
    matrix, _, over, _ = made.open_rows()
    seen = observability(over[made.outlet.name], matrix)
    found = {}
    for name in block.needed:
        if name not in made.states:
            row = seen[block.states.index(name)]
            found[name] = tuple(_linear(short(c), n) for c, n in zip(row, made.states, strict=True) if c)
    return found


def _linear(coefficient: Fraction, name: str) -> Term:
    return Term(coefficient, ((name, 1),))


def _extended(
    system: System, block: Block, made: Realisation, inner: tuple[tuple[Term, ...], Row | None]
) -> System:  # fmt: skip
    drive, own = inner
    _, _, over, share = made.open_rows()
    signals = [own] if own else []

    def by_old(name: str, row: Vector) -> Row:
        columns = zip(*made.change, strict=True)
        terms = [_linear(short(dot(row, c)), old) for c, old in zip(columns, block.states, strict=True)]
        return row_of(name, [*terms, *(replace(t, coefficient=t.coefficient * share[name]) for t in drive)])

    signals += [by_old(n, over[n]) for n in made.states if n not in block.states]
    signals += [by_old(row.name, over[row.name]) for row in made.signals]
    names = (*system.derived, *(row.name for row in signals if row is not own))
    return replace(system, signals=(*system.signals, *signals), derived=names)


def _replaced(
    system: System, block: Block, made: Realisation, inner: tuple[tuple[Term, ...], Row | None],
    kept: Mapping[str, tuple[Term, ...]],
) -> System:  # fmt: skip
    drive, own = inner
    origin = next(row.origin for row in system.rows if row.name == block.states[0])

    def inside(row: Row) -> Row:
        terms = [
            replace(d, coefficient=d.coefficient * t.coefficient) for t in row.terms if t.factors[0][0] == DRIVE
            for d in drive
        ]  # fmt: skip
        terms += [t for t in row.terms if t.factors[0][0] != DRIVE]
        return row_of(row.name, terms, origin)

    starts = [s.start for n in block.states for s in system.states if s.name == n]
    states = [State(n, short(dot(row, starts))) for n, row in zip(made.states, made.change, strict=True)]
    rows = [inside(row) for row in made.rows]
    added = [*([own] if own else []), *map(inside, made.signals)]
    added += [row_of(name, terms, origin) for name, terms in kept.items()]
    signals = [
        _taken(row, block, inside(made.outlet).terms) if row.name == block.signal else row for row in system.signals
    ]
    return replace(
        system,
        states=_at_place(system.states, [s.name for s in system.states], block.states, states),
        rows=_at_place(system.rows, [r.name for r in system.rows], block.states, rows),
        signals=_in_order([*added, *signals]),
    )


def _is_kept(name: str, system: System, block: Block) -> bool:
    """Whether a needed state has to be a sum of its own: watched, multiplied, or taken more than once."""
    rows = [r for r in (*system.rows, *system.signals) if r.name not in block.states]
    outside = [t for r in rows for t in r.terms if any(n == name for n, _ in t.factors)]
    driving = [t for t in block.drive if any(n == name for n, _ in t.factors)]
    taken = [*outside, *driving]
    return len(taken) != 1 or taken[0].degree > 1 or any(name == n for n, _ in system.watch)


def _put(row: Row, put_in: Mapping[str, tuple[Term, ...]]) -> Row:
    """Replace plain uses of names by sums."""
    if not any(n in put_in for t in row.terms for n, _ in t.factors):
        return row
    terms: list[Term] = []
    for term in row.terms:
        name = term.factors[0][0] if term.degree == 1 else ""
        terms += (
            [replace(term, coefficient=term.coefficient * x.coefficient, factors=x.factors) for x in put_in[name]]
            if name in put_in
            else [term]
        )
    return row_of(row.name, terms, row.origin)


def _taken(row: Row, block: Block, outlet: Sequence[Term]) -> Row:
    """The signal that alone takes the output: the new output with its direct share in place of the old."""
    old = [_linear(Fraction(-1), block.output)]
    old += [replace(t, coefficient=-t.coefficient * block.direct) for t in block.drive]
    return row_of(row.name, [*row.terms, *old, *outlet], row.origin)


def _at_place(
    items: tuple[Item, ...], names: Sequence[str], old: Sequence[str], new: Sequence[Item]
) -> tuple[Item, ...]:
    """Items with those of the old names gone and new ones where the first of them stood."""
    kept = [(n, x) for n, x in zip(names, items, strict=True) if n not in old]
    first = min(names.index(n) for n in old)
    return (*(x for n, x in kept if names.index(n) < first), *new, *(x for n, x in kept if names.index(n) > first))


def _in_order(rows: Sequence[Row]) -> tuple[Row, ...]:
    """Signals such that each needs only earlier ones, else in the order given."""
    waiting, done = list(rows), list[Row]()
    names = {row.name for row in rows}
    while waiting:
        held = {row.name for row in waiting}
        ready = [r for r in waiting if not any(n in held for t in r.terms for n, _ in t.factors)]
        assert ready, f"signals in a loop: {sorted(held & names)}"
        done += ready
        waiting = [r for r in waiting if r not in ready]
    return tuple(done)
