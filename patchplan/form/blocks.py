"""Linear blocks of a System: states that hang together by constant coefficients and answer to one drive.

A block may be realised in other states z = T x without changing anything around it. Found are what one equation of
higher order, or one rational function of s, makes of itself: a chain y' = (y)', y'' = (y')', ..., its last rate fed
by a path of states that serve nothing else.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property

from patchplan.equation.system import Row, System, Term
from patchplan.form.exact import Matrix, Vector, dot, observability, solved, transposed

#: Below this order a companion form is a two-integrator loop already, and nothing is left to choose.
LEAST_ORDER = 3
#: Beyond this order the exact arithmetic and the search for values would take long; such blocks stay as written.
MOST_ORDER = 16


@dataclass(frozen=True)
class Block:
    """x' = A x + b d, read at the output c x, with constant coefficients.

    Attributes
    ----------
    name
        The output as the file names it.
    states
        Names of x.
    output
        Name of the state that is the output.
    signal
        Name of the algebraic signal that alone takes the output, "" where other rows take it.
    direct
        Share of the drive that this signal adds, 0 where there is none.
    drive
        Terms of d, the first with coefficient 1; empty where nothing drives the block.
    needed
        States that others take or that are watched, in the order of ``states``; they include the output unless
        ``signal`` stands for it.
    """

    name: str
    states: tuple[str, ...]
    matrix: Matrix
    inlet: Vector
    output: str
    signal: str
    direct: Fraction
    drive: tuple[Term, ...]
    needed: tuple[str, ...]

    @property
    def order(self) -> int:
        """Number of states."""
        return len(self.states)

    @property
    def outlet(self) -> Vector:
        """c: the unit row of the output."""
        return tuple(Fraction(name == self.output) for name in self.states)

    @cached_property
    def seen(self) -> Matrix:
        """Rows c, c A, c A^2, ...: the output and its derivatives by the states, exact."""
        return observability(self.outlet, self.matrix)

    @cached_property
    def denominator(self) -> Vector:
        """Characteristic polynomial by rising power, monic, exact."""
        rows = self.seen
        last = tuple(dot(rows[-1], column) for column in transposed(self.matrix))
        # c A^n is a combination of the rows before (Cayley and Hamilton).
        shares = solved(transposed(rows), tuple((x,) for x in last))
        assert shares is not None, "the output of a chain sees every state of it"
        return (*(-share[0] for share in shares), Fraction(1))

    @cached_property
    def numerator(self) -> Vector:
        """Numerator of the transfer function from d to the output with its direct share, by rising power."""
        den, h = self.denominator, [dot(row, self.inlet) for row in self.seen]
        proper = [sum((den[k + i + 1] * h[i] for i in range(self.order - k)), Fraction(0)) for k in range(self.order)]
        return tuple(n + self.direct * d for n, d in zip((*proper, Fraction(0)), den, strict=True))


@dataclass(frozen=True)
class Found:
    """The blocks of a System, and sentences on those that have to stay as written."""

    blocks: tuple[Block, ...]
    notes: tuple[str, ...] = ()


def find_blocks(system: System) -> Found:
    """All blocks of order 3 and more whose states may be changed."""
    uses = _uses(system)
    rows = {row.name: row for row in system.rows}
    blocks, notes, taken = [], [], set[str]()
    # A chain may end inside a longer one: the longest counts.
    for states in sorted(_groups(system, rows, uses), key=len, reverse=True):
        if len(states) < LEAST_ORDER or taken.intersection(states):
            continue
        taken.update(states)
        held = sorted({k for s in states for t in rows[s].terms if t.degree == 1 and t.factors[0][0] in states
                       for k in t.knobs})  # fmt: skip
        if held:
            notes.append(f"{states[0]} keeps the states of its equation, so that {' and '.join(held)} stays one knob.")
        elif len(states) > MOST_ORDER:
            notes.append(f"{states[0]} keeps the states of its equation: order {len(states)} is above {MOST_ORDER}.")
        else:
            made = _block(system, states, rows, uses)
            blocks += [made] if made else []
    return Found(tuple(blocks), tuple(notes))


def _uses(system: System) -> dict[str, list[tuple[str, Term]]]:
    """Every use of every name: (row, term)."""
    uses: dict[str, list[tuple[str, Term]]] = {}
    for row in (*system.rows, *system.signals):
        for term in row.terms:
            for name, _ in term.factors:
                uses.setdefault(name, []).append((row.name, term))
    return uses


def _link(term: Term) -> str:
    """The name that a term passes on unchanged, "" where it does more."""
    return term.factors[0][0] if term.coefficient == 1 and term.degree == 1 and not term.knobs else ""


def _groups(
    system: System, rows: Mapping[str, Row], uses: Mapping[str, list[tuple[str, Term]]]
) -> Iterator[tuple[str, ...]]:
    """States of every chain with the path that feeds it, from the output on."""
    following = {
        name: _link(row.terms[0])
        for name, row in rows.items()
        if len(row.terms) == 1 and _link(row.terms[0]) in rows and _link(row.terms[0]) != name
    }
    watched = {name for name, _ in system.watch}
    fed = {name: [p for p in map(_link, row.terms) if p in rows and p not in watched and len(uses[p]) == 1]
           for name, row in rows.items()}  # fmt: skip
    behind = {*following.values(), *(p[0] for p in fed.values() if len(p) == 1 and p[0] not in following)}
    for first in (name for name in rows if name not in behind):
        chain = [first]
        while following.get(chain[-1], first) not in chain:
            chain.append(following[chain[-1]])
        while len(fed[chain[-1]]) == 1 and fed[chain[-1]][0] not in chain:
            chain += fed[chain[-1]]
        yield tuple(chain)


def _block(
    system: System, states: tuple[str, ...], rows: Mapping[str, Row], uses: Mapping[str, list[tuple[str, Term]]]
) -> Block | None:
    """The block of a group of states, None where more than one drive goes in."""
    place = {name: i for i, name in enumerate(states)}
    matrix = [[Fraction(0)] * len(states) for _ in states]
    drives: dict[str, list[Term]] = {}
    for name in states:
        for term in rows[name].terms:
            if term.degree == 1 and term.factors[0][0] in place:
                matrix[place[name]][place[term.factors[0][0]]] += term.coefficient
            else:
                drives.setdefault(name, []).append(term)
    drive, inlet = _common(drives, states)
    if inlet is None:
        return None
    watched = {name for name, _ in system.watch}
    needed = tuple(s for s in states if s in watched or any(_outside(u, place) for u in uses.get(s, ())))
    output = states[0]
    signal, direct = _taker(system, output, drive, place, uses) if output not in watched else ("", Fraction(0))
    if signal:
        needed = tuple(s for s in needed if s != output)
    return Block(
        signal or output, states, tuple(map(tuple, matrix)), inlet, output, signal, direct, drive, needed
    )  # fmt: skip


def _outside(use: tuple[str, Term], place: Mapping[str, int]) -> bool:
    """Whether a use is no plain term of the block itself."""
    row, term = use
    return row not in place or term.degree > 1


def _common(drives: Mapping[str, list[Term]], states: tuple[str, ...]) -> tuple[tuple[Term, ...], Vector | None]:
    """The drive that all rows have a share of, and the shares; None where they differ by more than a factor."""
    zero = (Fraction(0),) * len(states)
    if not drives:
        return (), zero
    lead = max(drives.values(), key=len)
    drive = tuple(replace(t, coefficient=t.coefficient / lead[0].coefficient) for t in lead)
    table = {(t.factors, t.knobs): t.coefficient for t in drive}
    inlet: list[Fraction] = []
    for state in states:
        terms = drives.get(state, [])
        shares = {t.coefficient / table[t.factors, t.knobs] for t in terms if (t.factors, t.knobs) in table}
        if terms and (len(shares) != 1 or {(t.factors, t.knobs) for t in terms} != table.keys()):
            return (), None
        inlet.append(shares.pop() if shares else Fraction(0))
    return drive, tuple(inlet)


def _taker(
    system: System, output: str, drive: tuple[Term, ...], place: Mapping[str, int],
    uses: Mapping[str, list[tuple[str, Term]]],
) -> tuple[str, Fraction]:  # fmt: skip
    """The algebraic signal that alone takes the output, and the share of the drive that it adds."""
    outside = [u for u in uses.get(output, ()) if _outside(u, place)]
    signals = {row.name: row for row in system.signals}
    if len(outside) != 1 or outside[0][0] not in signals or _link(outside[0][1]) != output:
        return "", Fraction(0)
    row = signals[outside[0][0]]
    table = {(t.factors, t.knobs): t.coefficient for t in row.terms}
    shares = {table.get((t.factors, t.knobs), Fraction(0)) / t.coefficient for t in drive}
    return row.name, shares.pop() if len(shares) == 1 else Fraction(0)
