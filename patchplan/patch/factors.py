"""Sums taken out as factors where that saves multipliers: x*y + x*z is x*(y + z)."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from itertools import combinations, islice, product
from typing import TypeAlias

from patchplan.equation.system import Monomial, Row, Term, row_of
from patchplan.patch.naming import sum_text
from patchplan.patch.products import cascade, degree, plan_products, times

#: Forms weighed in all, forms of one round from which the next one starts, and sums that are tried in one form.
MOST_FORMS, BEAM, MOST_SUMS = 150, 8, 30
#: Terms of all forms weighed, which bounds the work on large systems.
MOST_TERMS = 20_000
#: Sets of helping products that are tried in one form.
HELPING_SETS = 5
#: Monomial -> coefficient, in canonical order, the first coefficient 1.
_Sum: TypeAlias = tuple[tuple[Monomial, Fraction], ...]


@dataclass(frozen=True)
class _Factored:
    """Rows in which sums stand as factors, and the rows of these sums."""

    rows: tuple[Row, ...]
    sums: tuple[Row, ...] = ()

    @cached_property
    def cost(self) -> tuple[int, int, int, int]:
        """(multipliers, summers, cascade depth, wires)."""
        terms = [t for row in (*self.rows, *self.sums) for t in row.terms]
        made = plan_products((t.factors for t in terms), most_sets=HELPING_SETS)
        return len(made), len(self.sums), cascade(made), len(terms)


def factored(rows: Sequence[Row]) -> tuple[list[Row], list[Row]]:
    """Rows rewritten with fewest multipliers, and rows of the sums that stand in them as factors.

    Sums are kernels of the rows, what a product of signals leaves of the terms that it divides, and common parts of two
    kernels (Brayton and McMullen 1982, Proc. IEEE ISCAS). They are taken out one after the other, in every order where
    there are few, else from the best forms of each round. Among equally many multipliers fewer summers win, then less
    cascade depth. Rows stay as they are where no sum saves a multiplier.

    Parameters
    ----------
    rows
        Rows without knobs.
    """
    plain = {t.factors for row in rows for t in row.terms if t.degree > 1}
    at = [i for i, row in enumerate(rows) if any(t.degree > 1 for t in row.terms)]
    if len(plain) < 2:
        return list(rows), []
    start = _Factored(tuple(rows[i] for i in at))
    best = _search(start)
    if best.cost[0] >= start.cost[0]:
        return list(rows), []
    changed = dict(zip(at, best.rows, strict=True))
    return [changed.get(i, row) for i, row in enumerate(rows)], list(best.sums)


def _search(start: _Factored) -> _Factored:
    best, beam, left = start, [start], min(MOST_FORMS, MOST_TERMS // start.cost[-1])
    seen: set[_Factored] = set()
    while beam and left > 0:
        new = (f for form in beam for f in _next(form) if f not in seen)
        found = list(dict.fromkeys(islice(new, left)))
        left -= len(found)
        seen.update(found)
        beam = sorted(found, key=lambda f: f.cost)[:BEAM]
        best = min([best, *beam], key=lambda f: f.cost)
    return best


def _next(form: _Factored) -> Iterator[_Factored]:
    """Forms with one more sum taken out."""
    for parts in _common_sums((*form.rows, *form.sums)):
        name = f"({sum_text(Term(c, m) for m, c in parts)})"
        if any(name == row.name for row in form.sums):
            continue
        rows = tuple(_taken_out(row, parts, name) for row in form.rows)
        sums = tuple(_taken_out(row, parts, name) for row in form.sums)
        if (rows, sums) == (form.rows, form.sums):
            continue
        origin = next(t.origin for row in form.rows for t in row.terms if t.degree > 1)
        yield _Factored(rows, (*sums, row_of(name, [Term(c, m, (), origin) for m, c in parts], origin)))


def _common_sums(rows: Sequence[Row]) -> list[_Sum]:
    """Kernels and what two of them share up to a factor, those that cover most terms first."""
    kernels = list(dict.fromkeys(k for row in rows for k in _kernels(row)))[:MOST_SUMS]
    found = dict.fromkeys(_scaled(k) for k in kernels)
    for first, second in combinations(kernels, 2):
        shared: dict[Fraction, list[tuple[Monomial, Fraction]]] = {}
        other = dict(second)
        for monomial, coefficient in first:
            if monomial in other:
                shared.setdefault(coefficient / other[monomial], []).append((monomial, coefficient))
        found.update(dict.fromkeys(_scaled(tuple(group)) for group in shared.values() if len(group) > 1))
    return sorted(found, key=lambda parts: (-len(parts), parts))[:MOST_SUMS]


def _scaled(parts: _Sum) -> _Sum:
    return tuple((monomial, coefficient / parts[0][1]) for monomial, coefficient in parts)


def _kernels(row: Row) -> Iterator[_Sum]:
    for divisor in _divisors(row):
        parts = [(_over(t.factors, divisor), t.coefficient) for t in row.terms]
        kept = tuple((monomial, coefficient) for monomial, coefficient in parts if monomial is not None)
        if len(kept) > 1:
            yield kept


def _divisors(row: Row) -> list[Monomial]:
    """Products that divide a term, those of most signals first."""
    found = {
        tuple((name, k) for (name, _), k in zip(term.factors, powers, strict=True) if k)
        for term in row.terms
        for powers in product(*(range(power + 1) for _, power in term.factors))
    }
    return sorted(found - {()}, key=lambda m: (-degree(m), m))


def _over(monomial: Monomial, divisor: Monomial) -> Monomial | None:
    """Quotient of two products, None where it is none."""
    powers = dict(monomial)
    if any(powers.get(name, 0) < power for name, power in divisor):
        return None
    divided = dict(divisor)
    return tuple((name, power - divided.get(name, 0)) for name, power in monomial if power > divided.get(name, 0))


def _taken_out(row: Row, parts: _Sum, name: str) -> Row:
    """The row with every multiple of the sum by a product of signals written as product times sum."""
    terms = {t.factors: t for t in row.terms}
    for divisor in _divisors(row):
        covered = [terms.get(times(monomial, divisor)) for monomial, _ in parts]
        present = [t for t in covered if t is not None]
        if len(present) < len(parts):
            continue
        ratios = {t.coefficient / c for t, (_, c) in zip(present, parts, strict=True)}
        if len(ratios) == 1:
            for term in present:
                del terms[term.factors]
            factors = times(divisor, ((name, 1),))
            terms[factors] = Term(ratios.pop(), factors, (), present[0].origin)
    return row_of(row.name, terms.values(), row.origin) if len(terms) < len(row.terms) else row
