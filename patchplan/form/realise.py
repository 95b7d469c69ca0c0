"""The forms that a linear block may take: other states z = T x, the same output."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import lru_cache
from math import sqrt
from typing import Any

import numpy as np

from patchplan.equation.system import Row, Term, row_of
from patchplan.form.blocks import Block
from patchplan.form.exact import Matrix, Vector, long, observability, share_a_root, short, solved
from patchplan.form.sections import Section, cascade, fractions

#: The form of the file: a chain of derivatives, or the observer form of a block in s.
AS_WRITTEN = "companion"
#: Stands for the drive in the rows of a realisation.
DRIVE = "(drive)"
#: Above this order nobody builds a full matrix.
MOST_FULL = 8
#: Entries of a full matrix below this share of its largest are rounding.
_DUST = 1e-13


@dataclass(frozen=True)
class Realisation:
    """A block in other states.

    Attributes
    ----------
    form
        One of the names of :data:`FORMS`.
    states
        Names of z, in the order of the signal.
    rows
        One per state; factors are states, signals and :data:`DRIVE`.
    signals
        Sums that several rows take.
    outlet
        Row of the output, its direct share of the drive included.
    change
        T of z = T x.
    said
        What the form is made of, the middle of a sentence.
    """

    form: str
    states: tuple[str, ...]
    rows: tuple[Row, ...]
    signals: tuple[Row, ...]
    outlet: Row
    change: Matrix
    said: str

    def open_rows(self) -> tuple[Matrix, Vector, dict[str, Vector], dict[str, Fraction]]:
        """A, b, and for each signal and the outlet its row over the states and its share of the drive."""
        place = {name: i for i, name in enumerate(self.states)}
        zero = (Fraction(0),) * len(place)
        over: dict[str, Vector] = {n: tuple(Fraction(k == i) for k in range(len(place))) for n, i in place.items()}
        share: dict[str, Fraction] = dict.fromkeys(self.states, Fraction(0))
        over[DRIVE], share[DRIVE] = zero, Fraction(1)
        for row in (*self.signals, self.outlet):
            over[row.name], share[row.name] = _opened(row, over, share)
        opened = [_opened(row, over, share) for row in self.rows]
        return tuple(o[0] for o in opened), tuple(o[1] for o in opened), over, share


def _opened(row: Row, over: dict[str, Vector], share: dict[str, Fraction]) -> tuple[Vector, Fraction]:
    size = len(over[DRIVE])
    parts = [(t.coefficient, t.factors[0][0]) for t in row.terms]
    return tuple(sum((c * over[n][k] for c, n in parts), Fraction(0)) for k in range(size)), sum(
        (c * share[n] for c, n in parts), Fraction(0)
    )


@lru_cache(maxsize=64)
def realise(block: Block, form: str) -> Realisation | str:
    """The block in one of the forms, or a sentence on why it can't take it."""
    numerator, denominator = _numerator(block), block.denominator
    if share_a_root(numerator, denominator):
        return "A zero lies on a pole, so that the block has more states than its response needs."
    made = _FORMS[form](block, numerator, denominator)
    return made if isinstance(made, str) else _changed(block, made)


def _numerator(block: Block) -> Vector:
    """Numerator of the block; 1 where nothing drives it, so that its sections hang together all the same."""
    whole = block.numerator
    return whole if any(whole) else (Fraction(1), *whole[1:])


def _changed(block: Block, made: Realisation) -> Realisation | str:
    """Fill in T: both systems' outputs and their derivatives are the same combinations of states and drive."""
    matrix, _, over, _ = made.open_rows()
    seen = observability(over[made.outlet.name], matrix)
    change = solved(*(tuple(tuple(map(long, row)) for row in rows) for rows in (seen, block.seen)))
    if change is None:
        return "Rounded to floats, a zero lies on a pole."
    return replace(made, change=tuple(tuple(map(short, row)) for row in change))


def _term(coefficient: Fraction | float, name: str) -> Term:
    return Term(Fraction(coefficient), ((name, 1),))


class _Draft:
    """Rows while sections are strung together."""

    def __init__(self, block: Block) -> None:
        self.name = block.name
        self.rows: list[Row] = []
        self.signals: list[Row] = []

    def state(self) -> str:
        """The next state's name; a dot stands in no name of a file."""
        return f"{self.name}.{len(self.rows) + 1}"

    def add(self, *terms: Term) -> None:
        """The row of the next state."""
        self.rows.append(row_of(self.state(), terms))

    def done(self, form: str, outlet: Sequence[Term], said: str) -> Realisation:
        """The realisation, T not yet known."""
        states = tuple(r.name for r in self.rows)
        return Realisation(
            form, states, tuple(self.rows), tuple(self.signals), row_of(self.name, outlet), (), said
        )  # fmt: skip


def _place(draft: _Draft, section: Section, inlet: str, *, coupled: bool) -> list[Term]:
    """Add a section's states; its output as terms.

    Every pair is a two-integrator loop. Without zeros the damped integrator feeds the other (Kerwin, Huelsman and
    Newcomb 1967); with zeros the signal goes into both (observer form), so that no sum is needed behind. ``coupled``
    gives both integrators the same damping and the same gain of the loop (the normal form of Barnes and Fam 1977).
    """
    first = draft.state()
    through = [_term(section.direct, inlet)] if section.direct else []
    if len(section.poles) == 1:
        draft.add(_term(-section.denominator[0], first), _term(section.proper()[0], inlet))
        return [_term(1, first), *through]
    (a0, a1, _), (b0, b1) = section.denominator, section.proper()
    second = f"{draft.name}.{len(draft.rows) + 2}"
    if coupled and section.turns:
        damping, turn = Fraction(-section.poles[0].real), Fraction(abs(section.poles[0].imag))
        into = short((b0 - b1 * damping) / turn)
        draft.add(_term(-damping, first), _term(-turn, second), _term(into, inlet))
        draft.add(_term(turn, first), _term(-damping, second), _term(b1, inlet))
        return [_term(1, second), *through]
    # Both integrators of a loop get the same gain, so that all states are of the size of the output.
    turn = short(sqrt(a0)) if a0 > 0 else Fraction(1)
    loop, entry = _term(-short(a0 / turn), second), _term(short(b0 / turn), inlet)
    if b1:
        draft.add(loop, entry)
        draft.add(_term(turn, first), _term(-a1, second), _term(b1, inlet))
    else:
        draft.add(_term(-a1, first), loop, entry)
        draft.add(_term(turn, first))
    return [_term(1, second), *through]


def _in_series(block: Block, sections: Sequence[Section], form: str, *, coupled: bool) -> Realisation:
    draft, inlet, out = _Draft(block), DRIVE, list[Term]()
    for i, section in enumerate(sections):
        out = _place(draft, section, inlet, coupled=coupled)
        if len(out) == 1:
            inlet = out[0].factors[0][0]
        elif i < len(sections) - 1:
            inlet = f"{block.name}.s{i + 1}"
            draft.signals.append(row_of(inlet, out))
    return draft.done(form, out, _said(sections, "in series"))


def _said(sections: Sequence[Section], how: str) -> str:
    """``2 sections in series, Q 0.541 and 1.31``."""
    pairs = [s.quality for s in sections if len(s.poles) == 2]
    text = f"{len(sections)} section{'s' if len(sections) > 1 else ''} {how}"
    shown = [f"{q:.3g}" if np.isfinite(q) else "without damping" for q in pairs if q]
    if shown:
        text += ", Q " + (" and ".join([", ".join(shown[:-1]), shown[-1]]) if len(shown) > 1 else shown[0])
    return text


def _cascade(block: Block, numerator: Vector, denominator: Vector) -> Realisation:
    return _in_series(block, cascade(numerator, denominator), "cascade", coupled=False)


def _loops(block: Block, numerator: Vector, denominator: Vector) -> Realisation | str:
    sections = cascade(numerator, denominator)
    if not any(s.turns and s.poles[0].real for s in sections):
        return "No pair of poles is complex and damped: the cascade is this form already."
    return _in_series(block, sections, "two-integrator loops", coupled=True)


def _parallel(block: Block, numerator: Vector, denominator: Vector) -> Realisation | str:
    sections = fractions(numerator, denominator)
    if sections is None:
        return "Poles lie too close together for a sum of sections."
    draft, out = _Draft(block), list[Term]()
    for section in sections:
        out += _place(draft, section, DRIVE, coupled=True)
    if numerator[-1]:
        out.append(_term(short(numerator[-1]), DRIVE))
    return draft.done("parallel", out, _said(sections, "in parallel"))


def _ladder(block: Block, numerator: Vector, denominator: Vector) -> Realisation | str:
    """A chain of two-integrator loops, damped at one end (Schwarz 1956), from Routh's scheme, exact.

    It simulates a lossless ladder between a source and one resistor, whose response is least sensitive where most
    power passes (Orchard 1966, Inductorless filters).
    """
    gains = _schwarz(denominator)
    if gains is None:
        return "The block is not stable: a ladder of positive elements has no such poles."
    n = block.order
    draft = _Draft(block)
    names = [f"{block.name}.{k + 1}" for k in range(n)]
    matrix = [[Fraction(0)] * n for _ in range(n)]
    for k in range(n - 1):
        turn = short(sqrt(gains[k]))
        matrix[k][k + 1], matrix[k + 1][k] = turn, -turn
    matrix[-1][-1] = short(-denominator[n - 1])
    shape = tuple(map(tuple, matrix))
    unit = tuple(Fraction(k == 0) for k in range(n))
    inlet = solved(observability(unit, shape), tuple((h,) for h in _markov(numerator, denominator)))
    assert inlet is not None, "every state of a chain reaches its first one"
    for k in range(n):
        links = [_term(c, names[j]) for j, c in enumerate(matrix[k]) if c]
        draft.add(*links, _term(short(inlet[k][0]), DRIVE))
    out = [_term(1, names[0])]
    if numerator[-1]:
        out.append(_term(short(numerator[-1]), DRIVE))
    return draft.done("ladder", out, f"{n - 1} two-integrator loops in a chain, damped at its end")


def _markov(numerator: Vector, denominator: Vector) -> Vector:
    """Markov parameters of the proper part: the series of N/D in 1/s."""
    n = len(denominator) - 1
    proper = [x - numerator[-1] * d for x, d in zip(numerator[:n], denominator[:n], strict=True)]
    h: list[Fraction] = []
    for i in range(n):
        before = sum((denominator[n - 1 - k] * h[i - 1 - k] for k in range(i)), Fraction(0))
        h.append(proper[n - 1 - i] - before)
    return tuple(h)


def _schwarz(denominator: Vector) -> tuple[Fraction, ...] | None:
    """Gains of the loops from the first on, None where one is not positive (Routh's criterion)."""
    n = len(denominator) - 1
    damping = denominator[n - 1]
    if damping <= 0:
        return None
    upper = tuple(c if (n - k) % 2 == 0 else Fraction(0) for k, c in enumerate(denominator))
    lower = tuple(c / damping if (n - k) % 2 else Fraction(0) for k, c in enumerate(denominator[:n]))
    gains: list[Fraction] = []
    while len(lower) > 1:
        left = tuple(a - b for a, b in zip(upper, (Fraction(0), *lower), strict=True))
        gain = left[len(lower) - 2]
        if gain <= 0:
            return None
        gains.append(gain)
        upper, lower = lower, tuple(c / gain for c in left[: len(lower) - 1])
    return tuple(reversed(gains))


def _balanced(block: Block, numerator: Vector, denominator: Vector) -> Realisation | str:
    """States that are as easily reached as seen (Moore 1981; computed after Laub, Heath, Paige and Ward 1987)."""
    if block.order > MOST_FULL:
        return f"Each of its {block.order} states would take a wire from every other one."
    start = _loops(block, numerator, denominator)
    start = start if isinstance(start, Realisation) else _cascade(block, numerator, denominator)
    matrix, inlet, over, share = start.open_rows()
    rate = max(abs(float(x)) for row in matrix for x in row) or 1.0
    a = np.array([[float(x) for x in row] for row in matrix]) / rate
    b, c = (np.array([float(x) for x in v]) for v in (inlet, over[block.name]))
    made = _balance(a, b, c)
    if made is None:
        return "Only a stable block without a zero on a pole can be balanced."
    a, b, c = made
    draft = _Draft(block)
    names = [f"{block.name}.{k + 1}" for k in range(block.order)]
    for k in range(block.order):
        draft.add(*_kept(a[k] * rate, names, float(np.abs(a).max()) * rate), _term(b[k], DRIVE))
    out = _kept(c, names, float(np.abs(c).max()))
    if share[block.name]:
        out.append(_term(share[block.name], DRIVE))
    return draft.done("balanced", out, f"{block.order} states, each with all others")


def _kept(row: Any, names: Sequence[str], largest: float) -> list[Term]:
    return [_term(float(x), n) for x, n in zip(row, names, strict=True) if abs(x) > _DUST * largest]


def _balance(a: Any, b: Any, c: Any) -> tuple[Any, Any, Any] | None:
    """The balanced A, b, c, signs such that the drive enters positive; None where there is none."""
    from scipy.linalg import cholesky, solve_continuous_lyapunov, svd

    if np.linalg.eigvals(a).real.max() >= 0:
        return None
    try:
        reached = cholesky(_even(solve_continuous_lyapunov(a, -np.outer(b, b))), lower=True)
        seen = cholesky(_even(solve_continuous_lyapunov(a.T, -np.outer(c, c))), lower=True)
    except np.linalg.LinAlgError:
        return None
    left, sizes, right = svd(seen.T @ reached)
    if sizes[-1] < 1e-12 * sizes[0]:
        return None
    turn = (left / np.sqrt(sizes)).T @ seen.T
    back = reached @ (right.T / np.sqrt(sizes))
    turn = turn * np.where(turn @ b < 0, -1.0, 1.0)[:, None]
    back = back * np.where((turn @ back).diagonal() < 0, -1.0, 1.0)
    return turn @ a @ back, turn @ b, c @ back


def _even(matrix: Any) -> Any:
    return (matrix + matrix.T) / 2


_FORMS: dict[str, Callable[[Block, Vector, Vector], Realisation | str]] = {
    "cascade": _cascade,
    "two-integrator loops": _loops,
    "parallel": _parallel,
    "ladder": _ladder,
    "balanced": _balanced,
}
#: Names of all forms, the one of the file first.
FORMS = (AS_WRITTEN, *_FORMS)
