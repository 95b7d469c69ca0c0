"""Which definitions stay signals of their own, and which are put into the rows that use them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from patchplan.equation.polynomial import Atom, Kind, Polynomial, Powers, TooLargeError, degree, part


@dataclass
class Choice:
    """Rows of states and of signals; the substitution works on both.

    Attributes
    ----------
    rows, signals
        By atom. ``signals`` come in an order in which each needs only earlier ones.
    wanted
        Signals that are listed in any case.
    """

    rows: dict[Atom, Polynomial]
    signals: dict[Atom, Polynomial]
    wanted: frozenset[Atom]
    _users: dict[Atom, set[Atom]] = field(default_factory=dict)

    def run(self) -> None:
        """Decide from the last signal to the first; what is put in and not wanted is dropped."""
        for table in (self.rows, self.signals):
            for user, value in table.items():
                self._note(user, value)
        for atom in reversed(list(self.signals)):
            uses = self._uses(atom)
            gone = not uses or (self._put_in(atom, uses) and self._substituted(atom))
            if gone and atom not in self.wanted:
                self._drop(atom)

    def _note(self, user: Atom, value: Polynomial) -> None:
        for atom in value.atoms():
            if atom in self.signals:
                self._users.setdefault(atom, set()).add(user)

    def _value(self, user: Atom) -> Polynomial:
        return self.rows[user] if user in self.rows else self.signals[user]

    def _uses(self, atom: Atom) -> list[Powers]:
        """Every product that holds the signal."""
        users = sorted(self._users.get(atom, ()))
        return [p for user in users for p in self._value(user).terms if any(a == atom for a, _ in p)]

    def _put_in(self, atom: Atom, uses: list[Powers]) -> bool:
        value = self.signals[atom]
        kinds = value.kinds()
        if not kinds & {Kind.SIGNAL, Kind.SOURCE}:
            return True
        in_product = any(order(powers) > 1 for powers in uses)
        nonlinear = any(order(powers) > 1 for powers in value.terms)
        if len(value) == 1 and not nonlinear and Kind.PARAMETER not in kinds:
            return True
        if in_product:
            return False
        if nonlinear:
            return len(uses) == 1 and atom not in self.wanted
        # One coefficient with a knob stays one stage.
        return Kind.PARAMETER not in kinds or len(uses) + (atom in self.wanted) == 1

    def _substituted(self, atom: Atom) -> bool:
        """Put the signal into all its users; False where that outgrows the limits."""
        value = {atom: self.signals[atom]}
        users = sorted(self._users.get(atom, ()))
        try:
            changed = {user: self._value(user).substitute(value) for user in users}
        except TooLargeError:
            return False
        for user, made in changed.items():
            (self.rows if user in self.rows else self.signals)[user] = made
            self._note(user, made)
        self._users.pop(atom, None)
        return True

    def _drop(self, atom: Atom) -> None:
        value = self.signals.pop(atom)
        for used in value.atoms():
            self._users.get(used, set()).discard(atom)


def order(powers: Powers) -> int:
    """Number of signals multiplied, a function of time counted as one."""
    return degree(powers) + bool(part(powers, Kind.TIME))


def sorted_signals(signals: Mapping[Atom, Polynomial]) -> tuple[dict[Atom, Polynomial], list[Atom]]:
    """Signals in an order in which each needs only earlier ones, and those of the first loop found."""
    done: dict[Atom, Polynomial] = {}
    state: dict[Atom, int] = {}
    for start in signals:
        stack: list[tuple[Atom, Iterable[Atom]]] = [(start, _needs(start, signals))] if start not in state else []
        state.setdefault(start, 1)
        while stack:
            atom, needs = stack[-1]
            following = next(iter(needs), None)
            if following is None:
                stack.pop()
                state[atom] = 2
                done[atom] = signals[atom]
            elif state.get(following) == 1:
                path = [a for a, _ in stack]
                return done, path[path.index(following) :]
            elif following not in state:
                state[following] = 1
                stack.append((following, _needs(following, signals)))
    return done, []


def _needs(atom: Atom, signals: Mapping[Atom, Polynomial]) -> Iterable[Atom]:
    bases = sorted({Atom(a.kind, a.name, a.primes) for a in signals[atom].atoms()})
    found = [a if a in signals else Atom(a.kind, a.name) for a in bases]
    return iter([a for a in found if a in signals])
