"""Changes of variables: offsets where they pay, and what terminals dictate."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import replace
from fractions import Fraction
from math import comb, floor, log10

from patchplan.equation.problem import Terminal
from patchplan.equation.system import Row, State, System, Term, row_of
from patchplan.form.records import Form
from patchplan.reach.records import Range, Reach

#: An offset multiplies coefficient errors of its reference wires as much as it multiplies the signal's share of the
#: swing, so it has to win at least this factor in headroom, and one more for each wire it adds (common practice, no
#: source).
LEAST_GAIN = 2.0


def find_form(
    system: System,
    reach: Reach,
    terminals: Mapping[str, Terminal] | None = None,
    *,
    offsets: bool = True,
    swing: float = 10.0,
    sums: Mapping[str, Mapping[str, Fraction]] | None = None,
) -> Form:
    """Choose the variables that the board carries.

    Parameters
    ----------
    system, reach
        The equations and the ranges of their signals.
    terminals
        What the outside dictates, by signal.
    offsets
        Whether signals far from zero may be carried as a difference from a constant.
    swing
        Volts that an output may reach; a state whose terminal asks for a fair share of it needs no output stage.
    sums
        States that the problem does not have, by those that it has.
    """
    terminals = terminals or {}
    apart = {n: t for n, t in terminals.items() if not _fits_state(n, t, reach, swing)}
    system, renamed = _with_terminal_stages(system, apart)
    shifts = {renamed.get(n, n): -t.offset / t.volts_per_unit for n, t in terminals.items() if t.offset}
    scales = {renamed.get(n, n): t.volts_per_unit for n, t in terminals.items()}
    notes = [f"{n} keeps {float(t.volts_per_unit):.4g} V per unit from its terminal." for n, t in terminals.items()]
    form = Form(shifted(system, shifts), shifts, scales, sums=sums or {})
    if offsets:
        form, more = _with_free_offsets(form, reach)
        notes += more
    return replace(form, notes=tuple(notes))


def shifted(system: System, shifts: Mapping[str, Fraction]) -> System:
    """The system in the variables (signal - shift), for every name in ``shifts``."""
    if not any(shifts.values()):
        return system
    states = tuple(State(s.name, s.start - shifts.get(s.name, Fraction(0))) for s in system.states)
    rows = tuple(_shift_row(r, shifts) for r in system.rows)
    signals = []
    for row in system.signals:
        moved = _shift_row(row, shifts)
        here = shifts.get(row.name, Fraction(0))
        signals.append(row_of(row.name, (*moved.terms, Term(-here)), row.origin) if here else moved)
    return replace(system, states=states, rows=rows, signals=tuple(signals))


def _shift_row(row: Row, shifts: Mapping[str, Fraction]) -> Row:
    if not any(name in shifts for term in row.terms for name, _ in term.factors):
        return row
    return row_of(row.name, (t for term in row.terms for t in _shift_term(term, shifts)), row.origin)


def _shift_term(term: Term, shifts: Mapping[str, Fraction]) -> Iterable[Term]:
    """Binomial expansion of product((name + shift)^power)."""
    expanded: list[tuple[Fraction, tuple[tuple[str, int], ...]]] = [(term.coefficient, ())]
    for name, power in term.factors:
        shift = shifts.get(name, Fraction(0))
        choices = [(comb(power, k) * shift ** (power - k), k) for k in range(power + 1) if shift or k == power]
        expanded = [(c * factor, f + (((name, k),) if k else ())) for c, f in expanded for factor, k in choices]
    return (replace(term, coefficient=c, factors=f) for c, f in expanded if c)


def _fits_state(name: str, terminal: Terminal, reach: Reach, swing: float) -> bool:
    """Whether a state can carry the terminal's own scale: no offset, and a swing between half and most of the limit."""
    known = reach.ranges.get(name)
    if known is None or terminal.offset:
        return False
    return 0.5 <= known.peak * abs(float(terminal.volts_per_unit)) / swing <= 0.95


def _with_terminal_stages(system: System, terminals: Mapping[str, Terminal]) -> tuple[System, dict[str, str]]:
    """Give each state that a terminal dictates an output stage, so that the loop keeps its own scale."""
    states = {s.name for s in system.states}
    renamed = {n: f"{n}.out" for n in terminals if n in states}
    if not renamed:
        return system, {}
    rows = tuple(Row(new, (Term(Fraction(1), ((old, 1),)),)) for old, new in renamed.items())
    watch = tuple((renamed.get(n, n), p) for n, p in system.watch)
    return replace(system, signals=(*system.signals, *rows), watch=watch), renamed


def _with_free_offsets(form: Form, reach: Reach) -> tuple[Form, list[str]]:
    """Try an offset on each state that swings far from zero; keep those that pay."""
    products = {n for row in _all_rows(form.system) for t in row.terms if t.degree > 1 for n, _ in t.factors}
    notes: list[str] = []
    for state in form.system.states:
        known = reach.ranges.get(state.name)
        if known is None or state.name in products or state.name in form.scales:
            continue
        half = (known.high - known.low) / 2
        if half <= 0 or known.peak < (LEAST_GAIN + 1e-6) * half:
            continue
        offset = _round_offset(known)
        trial = shifted(form.system, {state.name: offset})
        added = _reference_wires(trial) - _reference_wires(form.system)
        gain = known.peak / max(known.high - float(offset), float(offset) - known.low)
        if gain > LEAST_GAIN + max(added, 0):
            form = replace(form, system=trial, offsets={**form.offsets, state.name: offset})
            notes.append(
                f"{state.name} is carried as {state.name} {'-' if offset > 0 else '+'} {abs(float(offset)):.6g}: "
                f"{gain:.3g} times the headroom "
                f"for {max(added, 0)} more reference wire{'s' if added != 1 else ''}."
            )
    return form, notes


def _all_rows(system: System) -> tuple[Row, ...]:
    return (*system.rows, *system.signals)


def _reference_wires(system: System) -> int:
    return sum(t.degree == 0 for row in _all_rows(system) for t in row.terms)


def _round_offset(known: Range) -> Fraction:
    """Middle of the range, rounded to a twentieth of its half width so that the number stays short."""
    middle, half = (known.low + known.high) / 2, (known.high - known.low) / 2
    step = Fraction(10) ** floor(log10(half / 5))
    return round(Fraction(middle) / step) * step
