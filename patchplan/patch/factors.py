"""Sums taken out as factors where that saves multipliers: x*y + x*z is x*(y + z), x^2 + 2*x*y + y^2 is (x + y)^2."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
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
    """Rows in which sums stand as factors, the rows of these sums, and sums that the board makes in any case."""

    rows: tuple[Row, ...]
    sums: tuple[Row, ...] = ()
    known: tuple[Row, ...] = ()

    @cached_property
    def cost(self) -> tuple[int, int, int, int]:
        """(multipliers, summers, cascade depth, wires)."""
        terms = [t for row in (*self.rows, *self.sums) for t in row.terms]
        made = plan_products((t.factors for t in terms), most_sets=HELPING_SETS)
        return len(made), len(self.sums), cascade(made), len(terms)


def factored(rows: Sequence[Row], known: Sequence[Row] = ()) -> tuple[list[Row], list[Row]]:
    """Rows rewritten with fewest multipliers, and rows of the sums that stand in them as factors.

    Sums are kernels of the rows, what a product of signals leaves of the terms that it divides, and common parts of
    two kernels (Brayton and McMullen 1982, Proc. IEEE ISCAS), and sums whose square a row holds. They are taken out
    one after the other, in every order where there are few, else from the best forms of each round. Among equally
    many multipliers fewer summers win, then less cascade depth. Rows stay as they are where no sum saves a
    multiplier.

    Parameters
    ----------
    rows
        Rows without knobs.
    known
        Sums that are signals of the board in any case; as factors they cost no summer.
    """
    plain = {t.factors for row in rows for t in row.terms if t.degree > 1}
    at = [i for i, row in enumerate(rows) if any(t.degree > 1 for t in row.terms)]
    if len(plain) < 2:
        return list(rows), []
    start = _Factored(tuple(rows[i] for i in at), known=tuple(row for row in known if len(row.terms) > 1))
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
        name, size = _name(parts, form.known)
        if any(name == row.name for row in form.sums):
            continue
        rows, sums = (
            tuple(row if row.name == name else _without(row, parts, name, size) for row in group)
            for group in (form.rows, form.sums)
        )
        if (rows, sums) == (form.rows, form.sums):
            continue
        if any(name == row.name for row in form.known):
            yield replace(form, rows=rows, sums=sums)
            continue
        origin = next(t.origin for row in form.rows for t in row.terms if t.degree > 1)
        made = row_of(name, [Term(c, m, (), origin) for m, c in parts], origin)
        yield replace(form, rows=rows, sums=(*sums, made))


def _name(parts: _Sum, known: Iterable[Row]) -> tuple[str, Fraction]:
    """Signal that carries a sum, and how many times the sum it is."""
    for row in known:
        terms = tuple((t.factors, t.coefficient) for t in row.terms)
        if dict(_scaled(terms)) == dict(_scaled(parts)):
            return row.name, dict(terms)[parts[0][0]] / parts[0][1]
    return f"({sum_text(Term(c, m) for m, c in parts)})", Fraction(1)


def _without(row: Row, parts: _Sum, name: str, size: Fraction) -> Row:
    """The row with the sum's square and the sum taken out, where it holds them times anything."""
    if _has_powers(row):
        row = _taken_out(row, _squared(parts), (name, 2), size**2, [*_divisors(row), ()])
    return _taken_out(row, parts, (name, 1), size, _divisors(row))


def _common_sums(rows: Sequence[Row]) -> list[_Sum]:
    """Kernels and what two of them share up to a factor, those that cover most terms first."""
    kernels = list(dict.fromkeys(k for row in rows for k in _kernels(row)))[:MOST_SUMS]
    roots = dict.fromkeys(s for row in rows for s in _roots(row))
    found = dict.fromkeys([*roots, *(_scaled(k) for k in kernels)])
    for first, second in combinations(kernels, 2):
        shared: dict[Fraction, list[tuple[Monomial, Fraction]]] = {}
        other = dict(second)
        for monomial, coefficient in first:
            if monomial in other:
                shared.setdefault(coefficient / other[monomial], []).append((monomial, coefficient))
        found.update(dict.fromkeys(_scaled(tuple(group)) for group in shared.values() if len(group) > 1))
    return sorted(found, key=lambda parts: (-len(parts), parts))[:MOST_SUMS]


def _roots(row: Row) -> Iterator[_Sum]:
    """Sums whose squares a row holds, perhaps times a product: all that go with one square, else two by two."""
    for divisor in (*_divisors(row), ()) if _has_powers(row) else ():
        parts = {m: t.coefficient for t in row.terms if (m := _over(t.factors, divisor)) is not None}
        for whole, lead in parts.items():
            root = _root(whole)
            if root is None or not root:
                continue
            others = {m: c / (2 * lead) for n, c in parts.items() if (m := _over(n, root)) is not None and m != root}
            fit = [(m, a) for m, a in others.items() if parts.get(times(m, m)) == lead * a * a]
            for chosen in dict.fromkeys([tuple(fit), *((one,) for one in fit)]):
                if chosen:
                    yield _scaled(tuple(sorted([(root, Fraction(1)), *chosen])))


def _root(monomial: Monomial) -> Monomial | None:
    """Square root of a product, None where there is none."""
    return None if any(power % 2 for _, power in monomial) else tuple((name, power // 2) for name, power in monomial)


def _has_powers(row: Row) -> bool:
    """Whether a square may be found: the square of a sum holds a square."""
    return any(power > 1 for t in row.terms for _, power in t.factors)


def _squared(parts: _Sum) -> _Sum:
    found: dict[Monomial, Fraction] = {}
    for (first, a), (second, b) in product(parts, repeat=2):
        key = times(first, second)
        found[key] = found.get(key, Fraction(0)) + a * b
    return tuple((monomial, c) for monomial, c in found.items() if c)


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


def _taken_out(row: Row, parts: _Sum, factor: tuple[str, int], size: Fraction, divisors: Iterable[Monomial]) -> Row:
    """The row with every multiple of the parts by one of the divisors written as divisor times factor over size."""
    terms = {t.factors: t for t in row.terms}
    for divisor in divisors:
        covered = [terms.get(times(monomial, divisor)) for monomial, _ in parts]
        present = [t for t in covered if t is not None]
        if len(present) < len(parts):
            continue
        ratios = {t.coefficient / c for t, (_, c) in zip(present, parts, strict=True)}
        if len(ratios) == 1:
            for term in present:
                del terms[term.factors]
            factors = times(divisor, (factor,))
            already = terms[factors].coefficient if factors in terms else Fraction(0)
            terms[factors] = Term(already + ratios.pop() / size, factors, (), present[0].origin)
    return row_of(row.name, terms.values(), row.origin) if len(terms) < len(row.terms) else row
