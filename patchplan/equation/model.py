"""Equations as polynomials, solved for the highest derivatives."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from collections.abc import Set as AbstractSet
from dataclasses import dataclass, field

from patchplan.equation.algebra import Algebra
from patchplan.equation.calculus import derivative
from patchplan.equation.elimination import SingularError, Sparse, inverse
from patchplan.equation.formula import fault_at
from patchplan.equation.polynomial import Atom, Kind, Polynomial, TooLargeError, part
from patchplan.equation.problem import Equation
from patchplan.equation.tree import Origin
from patchplan.errors import Fault, ProblemFaults


@dataclass(frozen=True)
class Block:
    """Equations that share rates: ``mass @ (rates of targets) = right``.

    Attributes
    ----------
    targets
        States (as atoms) whose rates the block gives, one per equation.
    mass, inverse
        Sparse rows; columns of ``inverse`` are equations, of ``mass`` targets.
    right
        One polynomial per equation.
    origins
        Place of each equation.
    """

    targets: tuple[Atom, ...]
    mass: tuple[Sparse, ...]
    inverse: tuple[Sparse, ...]
    right: tuple[Polynomial, ...]
    origins: tuple[Origin | None, ...]

    def rates(self) -> dict[Atom, Polynomial]:
        """Rate of every target."""
        return dict(zip(self.targets, self.solved(self.right), strict=True))

    def solved(self, right: tuple[Polynomial, ...]) -> list[Polynomial]:
        """``inverse @ right``."""
        return [
            Polynomial.sum(
                right[i].scaled(factor.value) if factor.value is not None else factor * right[i]
                for i, factor in row.items()
            )
            for row in self.inverse
        ]


def identity(target: Atom, right: Polynomial, origin: Origin | None = None) -> Block:
    """The block of one equation ``target' = right``."""
    one = ({0: Polynomial.constant(1)},)
    return Block((target,), one, one, (right,), (origin,))


@dataclass
class Definitions:
    """Algebraic signals as polynomials, each after those it needs."""

    polynomials: dict[Atom, Polynomial]
    algebra: Algebra
    _full: dict[Atom, Polynomial] = field(default_factory=dict)
    _reach: dict[Atom, frozenset[Atom]] = field(default_factory=dict)

    def full(self, atom: Atom) -> Polynomial:
        """Polynomial with all other definitions put in."""
        if atom not in self._full:
            self._full[atom] = self.opened(self.polynomials[atom], lambda _: True)
        return self._full[atom]

    def opened(self, value: Polynomial, which: Callable[[Atom], bool]) -> Polynomial:
        """``value`` with the chosen definitions, and all derivatives of definitions, put in."""
        values = {}
        for atom in value.atoms():
            base = Atom(atom.kind, atom.name)
            if base not in self.polynomials or not (atom.primes or which(atom)):
                continue
            inner = self.full(base)
            for _ in range(atom.primes):
                inner = derivative(inner, self.algebra)
            values[atom] = inner
        return value.substitute(values)

    def reach(self, atom: Atom) -> frozenset[Atom]:
        """Atoms that a definition stands on, through all others."""
        if atom not in self._reach:
            own = self.polynomials[atom].atoms()
            deeper = [self.reach(a) for a in own if a in self.polynomials]
            self._reach[atom] = frozenset(own).union(*deeper)
        return self._reach[atom]


def orders_of(values: Iterable[Polynomial], definitions: Definitions, unknowns: Iterable[str]) -> dict[str, int]:
    """Order of every unknown: its highest prime in the equations and the definitions they use."""
    orders = dict.fromkeys(unknowns, 0)
    for value in values:
        atoms = value.atoms()
        for atom in [*atoms, *(b for a in atoms if a in definitions.polynomials for b in definitions.reach(a))]:
            if atom.kind is Kind.SIGNAL and atom.name in orders:
                orders[atom.name] = max(orders[atom.name], atom.primes)
    return orders


def solve(
    equations: Mapping[int, tuple[Polynomial, Equation]], orders: Mapping[str, int], algebra: Algebra
) -> list[Block]:
    """Solve ``polynomial = 0`` for the highest derivatives; only equations that share some are coupled.

    Raises
    ------
    ProblemFaults
        Nonlinear or state-dependent highest derivatives, equations without any, a singular mass matrix.
    """
    highest = {Atom(Kind.SIGNAL, name, order) for name, order in orders.items()}
    left = dict(equations)
    blocks: list[Block] = []
    while True:
        split, faults = _split(left, highest)
        groups = _groups({i: set(coefficients) for i, (coefficients, _) in split.items()})
        if faults:
            # Equations that multiply a highest derivative wait until others have given it.
            groups = [g for g in groups if len(g) == len({a for i in g for a in split[i][0]})]
        made, wrong = _blocks(groups, split, left, algebra)
        if wrong or (faults and not made):
            raise ProblemFaults([*faults, *wrong])
        blocks += made
        if not faults:
            return blocks
        solved = {Atom(a.kind, a.name, a.primes + 1): x for b in made for a, x in b.rates().items()}
        highest -= solved.keys()
        done = {i for g in groups for i in g}
        left = {i: (_put_in(value, solved, e), e) for i, (value, e) in left.items() if i not in done}


Split = dict[int, tuple[dict[Atom, Polynomial], Polynomial]]


def _split(
    equations: Mapping[int, tuple[Polynomial, Equation]], highest: AbstractSet[Atom]
) -> tuple[Split, list[Fault]]:
    """Coefficients and right side of every equation that is linear in the highest derivatives; faults of the others."""
    split: Split = {}
    faults: list[Fault] = []
    for index, (value, equation) in equations.items():
        try:
            split[index] = _collected(value, highest, equation)
        except ProblemFaults as error:
            faults += error.faults
    bare = [_free_of_highest(equations[i][1], sorted(highest)) for i, (left, _) in split.items() if not left]
    if bare:
        raise ProblemFaults([*faults, *bare])
    return split, faults


def _blocks(
    groups: list[list[int]], split: Split, equations: Mapping[int, tuple[Polynomial, Equation]], algebra: Algebra
) -> tuple[list[Block], list[Fault]]:
    blocks = []
    faults: list[Fault] = []
    for group in groups:
        try:
            blocks.append(_block(group, split, equations, algebra))
        except ProblemFaults as error:
            faults += error.faults
    return blocks, faults


def _put_in(value: Polynomial, solved: Mapping[Atom, Polynomial], equation: Equation) -> Polynomial:
    try:
        return value.substitute(solved)
    except TooLargeError:
        raise ProblemFaults([too_large(equation)]) from None


def _collected(
    value: Polynomial, wanted: AbstractSet[Atom], equation: Equation
) -> tuple[dict[Atom, Polynomial], Polynomial]:
    """Coefficients of the highest derivatives, and the right side of what is left."""
    left: dict[Atom, dict[tuple[tuple[Atom, int], ...], object]] = {}
    rest = {}
    for powers, coefficient in value.terms.items():
        found = [(a, n) for a, n in powers if a in wanted]
        if not found:
            rest[powers] = -coefficient
            continue
        if len(found) > 1 or found[0][1] != 1:
            raise ProblemFaults([_not_linear(equation, found[0][0])])
        others = tuple(x for x in powers if x[0] not in wanted)
        if len(part(others, Kind.PARAMETER)) != len(others):
            raise ProblemFaults([_moving_mass(equation, found[0][0], others)])
        left.setdefault(found[0][0], {})[others] = coefficient
    places = {p: o for p, o in value.places.items() if p in rest}
    return {a: Polynomial(terms) for a, terms in left.items()}, Polynomial(rest, places)  # type: ignore[arg-type]


def _whole(equation: Equation) -> Origin:
    return Origin(equation.key, 0, len(equation.text))


def _not_linear(equation: Equation, atom: Atom) -> Fault:
    return Fault(
        f"The highest derivative {atom.text} stands in a product or a power.",
        "Write the equation linear in its highest derivatives.", equation.key, (0, len(equation.text)),
    )  # fmt: skip


def _moving_mass(equation: Equation, atom: Atom, others: tuple[tuple[Atom, int], ...]) -> Fault:
    names = ", ".join(a.text for a, _ in others if a.kind is not Kind.PARAMETER)
    what = "the time" if all(a.kind in (Kind.TIME, Kind.PARAMETER) for a, _ in others) else "a signal"
    return Fault(
        f"not built in this version: the coefficient of {atom.text} changes with {what} ({names}), which asks for "
        f"a quotient of signals.",
        "Divide by hand where the coefficient is a function of time; else use a constant coefficient.",
        equation.key, (0, len(equation.text)),
    )  # fmt: skip


def _free_of_highest(equation: Equation, highest: Iterable[Atom]) -> Fault:
    names = ", ".join(a.text for a in highest)
    return Fault(
        "This equation holds no highest derivative, so it ties signals to each other without integrating.",
        f"The highest derivatives of this file are {names}; write one of them here, or make it a definition.",
        equation.key, (0, len(equation.text)),
    )  # fmt: skip


def _groups(shared: Mapping[int, set[Atom]]) -> list[list[int]]:
    """Equations joined by common highest derivatives."""
    owner: dict[Atom, int] = {}
    parent = {i: i for i in shared}

    def root(i: int) -> int:
        while parent[i] != i:
            parent[i] = parent[parent[i]]
            i = parent[i]
        return i

    for i, atoms in shared.items():
        for atom in atoms:
            parent[root(i)] = root(owner.setdefault(atom, i))
    groups: dict[int, list[int]] = {}
    for i in shared:
        groups.setdefault(root(i), []).append(i)
    return list(groups.values())


def _block(
    group: list[int],
    split: Split,
    equations: Mapping[int, tuple[Polynomial, Equation]],
    algebra: Algebra,
) -> Block:
    atoms = sorted({a for i in group for a in split[i][0]})
    columns = {a: j for j, a in enumerate(atoms)}
    mass = tuple({columns[a]: entry for a, entry in split[i][0].items()} for i in group)
    first = equations[group[0]][1]
    if len(atoms) != len(group):
        raise ProblemFaults([_count(group, [a.text for a in atoms], first)])
    try:
        inverted = inverse(mass, algebra)
    except TooLargeError:
        raise ProblemFaults([_too_coupled(len(group), first)]) from None
    except SingularError as error:
        raise ProblemFaults([_singular(atoms[error.column], [equations[i][1] for i in group])]) from None
    targets = tuple(Atom(a.kind, a.name, a.primes - 1) for a in atoms)
    places = tuple(_whole(equations[i][1]) for i in group)
    return Block(targets, mass, tuple(inverted), tuple(split[i][1] for i in group), places)


def _count(group: list[int], names: list[str], first: Equation) -> Fault:
    return Fault(
        f"{len(group)} equations share the {len(names)} highest derivatives {', '.join(names)}.",
        "Give as many equations as unknowns.", first.key, (0, len(first.text)),
    )  # fmt: skip


def _too_coupled(count: int, first: Equation) -> Fault:
    return Fault(
        f"{count} equations are coupled by coefficients with adjustable parameters; their solution grows past all use.",
        "Fix parameters of the mass matrix, or couple fewer equations.", first.key, (0, len(first.text)),
    )  # fmt: skip


def _singular(atom: Atom, equations: list[Equation]) -> Fault:
    numbers = ", ".join(str(e.index + 1) for e in equations)
    return Fault(
        f"The mass matrix of equation {numbers} is singular: {atom.text} does not follow from it."
        if len(equations) == 1
        else f"The mass matrix of equations {numbers} is singular: {atom.text} does not follow from them.",
        "Check the coefficients of the highest derivatives.", equations[0].key, (0, len(equations[0].text)),
    )  # fmt: skip


def too_large(equation: Equation) -> Fault:
    """Fault of an expansion that outgrows its limits after definitions are put in."""
    return fault_at(
        equation.right, "With its definitions put in, this equation has too many terms.", "Use lower powers."
    )
