"""Derivatives of inputs removed by a change of states, as in the observer form of a transfer function."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

from patchplan.equation.model import Block
from patchplan.equation.polynomial import Atom, Kind, Polynomial, Powers, part
from patchplan.equation.tree import Origin
from patchplan.errors import Fault, ProblemFaults


@dataclass
class Change:
    """State of the removal.

    Attributes
    ----------
    blocks
        All first-order blocks, chains included.
    replaced
        States that became algebraic signals, with their polynomials.
    wanted
        Other signals that must be free of input derivatives too.
    start
        Start value of every old and new state.
    at_start
        Value of an input, or of a derivative of it, just after t = 0.
    lower
        The input whose derivative an atom is, one prime less.
    """

    blocks: list[Block]
    wanted: dict[Atom, Polynomial]
    start: dict[Atom, Fraction]
    at_start: Callable[[Atom], Fraction]
    lower: Callable[[Atom], Atom]
    taken: set[str]
    replaced: dict[Atom, Polynomial]
    order: list[Atom]


def remove_rates(change: Change) -> None:
    """Change states until no equation holds the derivative of an input.

    With M x' = f + c*u' the state q = M x - c*u has q' = f: nothing is differentiated. Terms c*z' with the same
    coefficients as c*u' are taken along, so that a damper stays one coefficient c*(z - u).

    Raises
    ------
    ProblemFaults
        Where an input derivative multiplies a signal, or more of them are wanted than there are integrators.
    """
    for _ in range(4 * len(change.order) + 8):
        held = [b for b in change.blocks if any(Kind.RATE in r.kinds() for r in b.right)]
        if not held:
            return
        _absorb(change, max(held, key=_highest_rate))
    raise ProblemFaults([_too_many(held[0].origins[0], _rates(held[0]))])


def _rates(block: Block) -> list[Atom]:
    return sorted({a for r in block.right for a in r.atoms() if a.kind is Kind.RATE})


def _highest_rate(block: Block) -> int:
    return max(a.primes for a in _rates(block))


def _absorb(change: Change, block: Block) -> None:
    states = {a for b in change.blocks if b is not block for a in b.targets}
    lifted = [_lifted(change, right, states, place) for right, place in zip(block.right, block.origins, strict=True)]
    fresh = [_fresh(change, target) for target in block.targets]
    inner = []
    for i, q in enumerate(fresh):
        start = _start(change, block, i, lifted[i][0])
        change.start[q] = start.terms.get((), Fraction(0))
        # What an adjustable parameter changes of the start value goes into the signal, so that q starts the same at
        # every setting of the knob.
        knobs = start - Polynomial.constant(change.start[q])
        inner.append(Polynomial.sum([Polynomial.of(q, 1, block.origins[i]), lifted[i][0], knobs]))
    solved = dict(zip(block.targets, block.solved(tuple(inner)), strict=True))
    _refuse_rates_left(solved, block)
    change.blocks.remove(block)
    _lower_level(change, block, tuple(inner))
    for b, ones in [(q, rest) for q, (_, rest) in zip(fresh, lifted, strict=True)]:
        change.blocks.append(_single(b, ones, block))
    for target, q in zip(block.targets, fresh, strict=True):
        change.order[change.order.index(target)] = q
    _put_in(change, solved)


def _single(target: Atom, right: Polynomial, block: Block) -> Block:
    one = ({0: Polynomial.constant(1)},)
    return Block((target,), one, one, (right,), block.origins[:1])


def _lifted(
    change: Change, right: Polynomial, states: set[Atom], place: Origin | None
) -> tuple[Polynomial, Polynomial]:
    """(L, rest) with right = L' + rest and no input derivative of the highest kind in the rest."""
    whole: dict[Powers, Fraction] = {}
    shared: set[Powers] = set()
    for powers, value in right.terms.items():
        rate = part(powers, Kind.RATE)
        if rate:
            constant = part(powers, Kind.PARAMETER)
            if len(constant) + 1 != len(powers) or rate[0][1] != 1:
                raise ProblemFaults([_multiplied(right.places.get(powers, place), powers)])
            shared.add(constant)
            whole[powers] = value
    for powers, value in right.terms.items():
        signal = part(powers, Kind.SIGNAL)
        constant = part(powers, Kind.PARAMETER)
        if constant in shared and len(signal) == 1 and len(powers) == len(constant) + 1 and signal[0][1] == 1:
            atom = signal[0][0]
            if atom.primes and Atom(atom.kind, atom.name, atom.primes - 1) in states:
                whole[powers] = value
    rest = Polynomial({p: c for p, c in right.terms.items() if p not in whole}, right.places)
    lifted = {tuple(sorted((_integral(change, a), n) for a, n in p)): c for p, c in whole.items()}
    places = {tuple(sorted((_integral(change, a), n) for a, n in p)): o for p, o in right.places.items() if p in whole}
    return Polynomial(lifted, places), rest


def _integral(change: Change, atom: Atom) -> Atom:
    if atom.kind is Kind.PARAMETER:
        return atom
    return change.lower(atom) if atom.kind is Kind.RATE else Atom(atom.kind, atom.name, atom.primes - 1)


def _lower_level(change: Change, block: Block, inner: tuple[Polynomial, ...]) -> None:
    """Where input derivatives are left, chains z' = target become ``mass @ z' = q + L`` for the next level."""
    if not any(Kind.RATE in x.kinds() for x in inner):
        return
    chains: dict[Atom, Block] = {}
    for b in change.blocks:
        if len(b.targets) == 1 and b.right[0] in [Polynomial.of(t) for t in block.targets]:
            chains[next(t for t in block.targets if b.right[0] == Polynomial.of(t))] = b
    if len(chains) != len(block.targets):
        return
    for b in chains.values():
        change.blocks.remove(b)
    below = tuple(chains[t].targets[0] for t in block.targets)
    change.blocks.append(Block(below, block.mass, block.inverse, inner, block.origins))


def _put_in(change: Change, solved: dict[Atom, Polynomial]) -> None:
    """Replace former states where their polynomials hold input derivatives; else leave them as signals."""
    held = {a: p for a, p in solved.items() if Kind.RATE in p.kinds()}
    change.replaced.update(solved)
    while held:
        change.blocks = [
            Block(b.targets, b.mass, b.inverse, tuple(r.substitute(held) for r in b.right), b.origins)
            for b in change.blocks
        ]
        for table in (change.replaced, change.wanted):
            for atom, value in table.items():
                table[atom] = value.substitute(held)
        # A definition that holds input derivatives now must give way too, where it is used.
        used = {a for b in change.blocks for r in b.right for a in r.atoms()}
        used |= {a for value in change.wanted.values() for a in value.atoms()}
        held = {a: p for a, p in change.wanted.items() if a in used and Kind.RATE in p.kinds()}


def _start(change: Change, block: Block, row: int, lifted: Polynomial) -> Polynomial:
    """Start value of M x - L, in adjustable parameters."""
    physical = [m.scaled(change.start[block.targets[j]]) for j, m in block.mass[row].items()]
    signals = [a for a in lifted.atoms() if a.kind is not Kind.PARAMETER]
    values = {a: change.start[a] if a.kind is Kind.SIGNAL else change.at_start(a) for a in signals}
    at_start = lifted.substitute({a: Polynomial.constant(value) for a, value in values.items()})
    return Polynomial.sum(physical) - at_start


def _fresh(change: Change, target: Atom) -> Atom:
    stem = f"{target.name}_q"
    name, number = stem, 1
    while name in change.taken:
        number += 1
        name = f"{stem}{number}"
    change.taken.add(name)
    return Atom(Kind.SIGNAL, name)


def _refuse_rates_left(solved: dict[Atom, Polynomial], block: Block) -> None:
    for target, value in solved.items():
        rates = sorted(a for a in value.atoms() if a.kind is Kind.RATE)
        if rates and not target.primes:
            raise ProblemFaults([_too_many(block.origins[0], rates)])


def _too_many(place: Origin | None, rates: list[Atom]) -> Fault:
    names = ", ".join(a.text for a in rates)
    return _at(
        place,
        f"The derivative of an input ({names}) is wanted more often than the equation integrates.",
        f"Supply {names} as an input of its own.",
    )


def _multiplied(place: Origin | None, powers: Powers) -> Fault:
    rates = ", ".join(a.text for a, _ in part(powers, Kind.RATE))
    return _at(
        place,
        f"The derivative of an input ({rates}) has a coefficient that changes, so no change of states removes it.",
        f"Supply {rates} as an input of its own.",
    )


def _at(place: Origin | None, found: str, remedy: str) -> Fault:
    return Fault(found, remedy, place.key, (place.start, place.end)) if place else Fault(found, remedy)
