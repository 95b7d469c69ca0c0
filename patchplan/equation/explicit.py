"""Problem to System: sort the names, solve for the highest derivatives, reduce to first order."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from fractions import Fraction

from patchplan.equation.assembly import Assembly
from patchplan.equation.calculus import derivative
from patchplan.equation.checks import (
    count_faults,
    faults_before,
    jump_faults,
    range_faults,
    regular_faults,
    start_faults,
    time_trees,
)
from patchplan.equation.choice import Choice, sorted_signals
from patchplan.equation.faults import rendered
from patchplan.equation.formula import fault_at
from patchplan.equation.knobs import Knobs
from patchplan.equation.meaning import Meaning, meaning_of, slope_of, start_of
from patchplan.equation.model import Block, identity, orders_of, solve, too_large
from patchplan.equation.outline import Outline, names_in, outline_of, without_doubled
from patchplan.equation.polynomial import MOST_TERMS, Atom, Kind, Polynomial, TooLargeError
from patchplan.equation.problem import Problem
from patchplan.equation.rates import Change, remove_rates
from patchplan.equation.system import Monomial, Row, State, System, Term, row_of
from patchplan.equation.tree import Name
from patchplan.errors import Fault, ProblemFaults


def build_system(problem: Problem) -> System:
    """The explicit first-order system of a problem.

    Start values hold just after t = 0: an input that jumps at exactly 0 has jumped already, and a step at or before 0
    is a constant. An input known only by its bounds counts as 0 there (as the bound nearest to 0 where 0 lies outside).

    Raises
    ------
    ProblemFaults
        With all faults found, each with key and span.
    """
    problem, faults = without_doubled(problem, outline_of(problem))
    outline = outline_of(problem)
    faults += faults_before(problem, outline)
    _stop(faults if problem.duration <= 0 else ())
    meaning = meaning_of(problem, outline, faults)
    orders = _opened(meaning)
    blocks = _solved(problem, outline, meaning, orders)
    # What is missing or unused in the tables alone does not keep the equations from being looked at further.
    faults = [*meaning.faults, *_table_faults(problem, outline, meaning, orders)]
    change = _without_rates(problem, meaning, orders, blocks, faults)
    _stop(faults)
    return _assembled(problem, outline, meaning, change)


def system_of(problem: Problem) -> System:
    """The same, with faults rendered for people.

    Raises
    ------
    ProblemFaults
        With all faults found, in file order, and their text in ``rendered``.
    """
    try:
        return build_system(problem)
    except ProblemFaults as error:
        raise rendered(error, problem) from None


def _without_rates(
    problem: Problem, meaning: Meaning, orders: Mapping[str, int], blocks: list[Block], faults: list[Fault]
) -> Change:
    """First-order equations without derivatives of inputs."""
    rates = {a: value for b in blocks for a, value in b.rates().items()}
    change = _change(problem, meaning, orders, blocks)
    try:
        change.wanted = _wanted(problem, meaning, orders, rates)
        remove_rates(change)
    except ProblemFaults as error:
        faults += error.faults
    except TooLargeError:
        found = f"Put into each other, the equations have over {MOST_TERMS} terms."
        faults.append(Fault(found, "Use lower powers.", "equations"))
    return change


def _stop(faults: Iterable[Fault]) -> None:
    found = tuple(dict.fromkeys(faults))
    if found:
        raise ProblemFaults(found)


def _solved(problem: Problem, outline: Outline, meaning: Meaning, orders: Mapping[str, int]) -> list[Block]:
    """Blocks of the highest derivatives, or all faults found on the way."""
    trees = time_trees(meaning.algebra)
    wrong_count = list(count_faults(orders, len(meaning.equations)))
    faults = [
        *jump_faults(trees, problem.duration),
        *regular_faults(trees, meaning.algebra.divisors, problem.duration),
        *wrong_count,
    ]
    blocks = []
    try:
        blocks = [] if wrong_count or not meaning.whole else solve(meaning.equations, orders, meaning.algebra)
    except ProblemFaults as error:
        faults += error.faults
    if faults or not meaning.whole:
        _stop([*meaning.faults, *faults, *_table_faults(problem, outline, meaning, orders)])
    return blocks


def _table_faults(problem: Problem, outline: Outline, meaning: Meaning, orders: Mapping[str, int]) -> list[Fault]:
    # The output of a block in s that is at fault is no unknown yet.
    at_rest = meaning.at_rest.union(outline.outputs)
    return [*start_faults(problem, orders, at_rest, outline), *_unknown_signals(problem, outline, meaning, orders)]


def _opened(meaning: Meaning) -> dict[str, int]:
    """Put derivatives of definitions, and definitions that hold highest or input derivatives, into the equations.

    Returns
    -------
    dict
        Order of every unknown.
    """
    definitions = meaning.definitions
    faults = []
    for which in ("primed", "hot"):
        orders = orders_of((v for v, _ in meaning.equations.values()), definitions, meaning.unknowns)
        hot = {
            d
            for d in definitions.polynomials
            if which == "hot"
            and any(a.kind is Kind.RATE or a.primes >= orders.get(a.name, 99) for a in definitions.reach(d))
        }
        for index, (value, equation) in meaning.equations.items():
            try:
                meaning.equations[index] = definitions.opened(value, hot.__contains__), equation
            except TooLargeError:
                faults.append(too_large(equation))
            except ProblemFaults as error:
                faults += error.faults
    _stop([*meaning.faults, *faults] if faults else ())
    return orders


def _signal(text: str) -> Atom:
    base = text.rstrip("'")
    return Atom(Kind.SIGNAL, base, len(text) - len(base))


def _asked(problem: Problem) -> dict[str, str]:
    """Signals named outside the equations, with the key that names them."""
    asked = {w.signal: f"watch[{i}]" for i, w in enumerate(problem.watch)}
    for table, names in (("ranges", problem.ranges), ("terminals", problem.terminals)):
        for name in names:
            asked.setdefault(name, f"{table}.{name}")
    return asked


def _unknown_signals(problem: Problem, outline: Outline, meaning: Meaning, orders: Mapping[str, int]) -> list[Fault]:
    known = {*orders, *problem.inputs, *outline.definitions, *outline.outputs}
    known |= {a.name for a in meaning.definitions.polynomials} | meaning.undefined | problem.parameters.keys()
    faults = []
    for text, key in _asked(problem).items():
        atom = _signal(text)
        if atom.name not in known:
            faults.append(Fault(f"{text} is no signal of the equations.", "Name an unknown or a definition.", key))
        elif atom.primes and atom.name in problem.inputs:
            faults.append(
                Fault(f"{text} is the derivative of an input.", f"Supply {text} as an input of its own.", key)
            )
    return faults


def _change(problem: Problem, meaning: Meaning, orders: Mapping[str, int], blocks: list[Block]) -> Change:
    """First-order blocks of everything, with the chains of higher-order unknowns."""
    chains = []
    order = []
    start = {}
    for name, count in orders.items():
        for k in range(count):
            state = Atom(Kind.SIGNAL, name, k)
            order.append(state)
            start[state] = problem.start.get(state.text, Fraction(0))
            if k + 1 < count:
                chains.append(identity(state, Polynomial.of(Atom(Kind.SIGNAL, name, k + 1))))
    algebra, inputs = meaning.algebra, problem.inputs

    def at_start(atom: Atom) -> Fraction:
        given = inputs[atom.name]
        return slope_of(given, algebra, atom.primes) if atom.kind is Kind.RATE else start_of(given, algebra)

    def lower(atom: Atom) -> Atom:
        if atom.primes > 1:
            return Atom(Kind.RATE, atom.name, atom.primes - 1)
        if atom.name in algebra.named:
            ((((plain, _),), _),) = algebra.polynomial(Name(atom.name)).terms.items()
            return plain
        return Atom(Kind.SOURCE, atom.name)

    taken = {*problem.parameters, *inputs, *orders, *(a.name for a in meaning.definitions.polynomials)}
    return Change([*chains, *blocks], {}, start, at_start, lower, taken, {}, order)


def _wanted(
    problem: Problem, meaning: Meaning, orders: Mapping[str, int], rates: Mapping[Atom, Polynomial]
) -> dict[Atom, Polynomial]:
    """Polynomials of the definitions, and of other signals asked for, without highest derivatives."""
    definitions = meaning.definitions

    def lowered(value: Polynomial) -> Polynomial:
        while True:
            high = {a for a in value.atoms() if a.kind is Kind.SIGNAL and a.primes >= orders.get(a.name, 99)}
            if not high:
                return value
            put = {}
            for a in high:
                put[a] = rates[Atom(a.kind, a.name, orders[a.name] - 1)]
                for _ in range(a.primes - orders[a.name]):
                    put[a] = derivative(put[a], meaning.algebra)
            value = definitions.opened(value.substitute(put), lambda _: False)

    found = {}
    for atom, value in definitions.polynomials.items():
        found[atom] = lowered(definitions.opened(value, lambda _: False))
    for text in _asked(problem):
        atom = _signal(text)
        base = Atom(atom.kind, atom.name)
        if base in definitions.polynomials and atom.primes:
            found[atom] = lowered(definitions.opened(Polynomial.of(atom), lambda _: False))
        elif atom.name in orders and atom.primes >= orders[atom.name]:
            found[atom] = lowered(Polynomial.of(atom))
        elif atom.name in problem.inputs and not _is_source(atom.name, meaning):
            found[atom] = meaning.algebra.polynomial(Name(atom.name))
    return found


def _is_source(name: str, meaning: Meaning) -> bool:
    return name in meaning.algebra.sources or name in meaning.algebra.named


def _assembled(problem: Problem, outline: Outline, meaning: Meaning, change: Change) -> System:
    rows = {a: value for b in change.blocks for a, value in b.rates().items()}
    asked = _asked(problem)
    watch = problem.watch
    # Without an unknown the definitions are all there is to see.
    visible = (*outline.unknowns, *outline.outputs) or tuple(outline.definitions)
    names = [(w.signal, w.polarity) for w in watch] or [(n, 0) for n in visible]
    wanted = {*asked, *(n for n, _ in names)}
    signals = _needed({**change.wanted, **change.replaced}, rows, wanted)
    _stop(_held_rates(signals, asked, outline))
    ordered, loop = sorted_signals(signals)
    assert not loop
    choice = Choice(rows, ordered, frozenset(a for a in ordered if a.text in wanted))
    choice.run()
    assembly = Assembly(meaning.algebra, problem.inputs, Knobs(meaning.algebra, problem.parameters))
    state_rows = tuple(assembly.row(a.text, choice.rows[a]) for a in change.order)
    signal_rows = tuple(assembly.row(a.text, value) for a, value in choice.signals.items())
    for name in problem.inputs:
        if name in wanted and _is_source(name, meaning):
            assembly.input(name)
    made = System(
        tuple(State(a.text, change.start[a]) for a in change.order), state_rows, signal_rows,
        tuple(assembly.sources.values()), tuple(assembly.knobs.made.values()),
        tuple(p for p in problem.parameters.values() if p.adjustable), tuple(names), problem.duration,
        problem.time_unit, problem.time_unit_seconds,
    )  # fmt: skip
    _stop(range_faults(problem, made))
    return made


def _needed(
    signals: Mapping[Atom, Polynomial], rows: Mapping[Atom, Polynomial], wanted: set[str]
) -> dict[Atom, Polynomial]:
    """Signals that rows or the user ask for, directly or through others."""
    stack = [a for a in signals if a.text in wanted] + [a for value in rows.values() for a in value.atoms()]
    needed: set[Atom] = set()
    while stack:
        atom = stack.pop()
        if atom in signals and atom not in needed:
            needed.add(atom)
            stack += signals[atom].atoms()
    return {a: value for a, value in signals.items() if a in needed}


def _held_rates(signals: Mapping[Atom, Polynomial], asked: Mapping[str, str], outline: Outline) -> list[Fault]:
    faults = []
    for atom, value in signals.items():
        rates = sorted(a for a in value.atoms() if a.kind is Kind.RATE)
        if not rates:
            continue
        texts = ", ".join(a.text for a in rates)
        found = f"{atom.text} holds the derivative of an input ({texts}), which would have to be differentiated."
        remedy = f"Supply {rates[0].text} as an input of its own, or do not ask for {atom.text}."
        uses = [n for e in (*outline.definitions.values(), *outline.blocks) for n in names_in(e)]
        place = max((n for n in uses if n.name == rates[0].name), key=lambda n: n.primes, default=None)
        if atom.text in asked or place is None:
            faults.append(Fault(found, remedy, asked.get(atom.text, "equations")))
        else:
            faults.append(fault_at(place, found, remedy))
    return faults


def expanded(system: System) -> tuple[Row, ...]:
    """Rows of states, then of signals, with kept signals put in: only states and sources stand in factors.

    Raises
    ------
    TooLargeError
        Where a row would have more than ``MOST_TERMS`` terms.
    """
    values: dict[str, tuple[Term, ...]] = {}
    signals = []
    for row in system.signals:
        made = row_of(row.name, _substituted(row, values), row.origin)
        values[row.name] = made.terms
        signals.append(made)
    states = [row_of(row.name, _substituted(row, values), row.origin) for row in system.rows]
    return (*states, *signals)


def _substituted(row: Row, values: Mapping[str, tuple[Term, ...]]) -> list[Term]:
    found = []
    for term in row.terms:
        parts = [Term(term.coefficient, tuple(f for f in term.factors if f[0] not in values), term.knobs, term.origin)]
        for name, power in term.factors:
            for _ in range(power if name in values else 0):
                if len(parts) * len(values[name]) > MOST_TERMS:
                    raise TooLargeError
                parts = list(row_of("", [_multiplied(p, q) for p in parts for q in values[name]]).terms)
        found += parts
    return found


def _multiplied(left: Term, right: Term) -> Term:
    powers: dict[str, int] = dict(left.factors)
    for name, power in right.factors:
        powers[name] = powers.get(name, 0) + power
    factors: Monomial = tuple(sorted(powers.items()))
    return Term(left.coefficient * right.coefficient, factors, tuple(sorted(left.knobs + right.knobs)), left.origin)
