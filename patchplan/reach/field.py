"""The numeric form of a System: all rates and signals, for one run or many at once."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.system import Row, System

Array = NDArray[np.float64]
Index = NDArray[np.intp]

#: Above this many names matrices are kept sparse.
DENSE_LIMIT = 60


@dataclass(frozen=True)
class Block:
    """Rows that are evaluated together: ``out[row] += coefficient * product of factors``.

    Attributes
    ----------
    n_rows
        How many rows.
    rows
        Shape ``(n_terms,)``: row of each term.
    factors
        Shape ``(degree, n_terms)``: positions in the value vector; position 0 holds 1.
    terms
        Where the block's terms stand among all terms of the System.
    places
        Positions of the rows in the value vector; empty for the rates.
    """

    n_rows: int
    rows: Index
    factors: Index
    terms: slice
    places: Index


@dataclass(frozen=True)
class Field:
    """Term indices of a System, free of any symbolic object.

    The value vector is (1, states, sources, signals). Terms are numbered through the blocks of signals, then the rates.

    Attributes
    ----------
    names
        States, sources, signals, in that order.
    coefficients
        Shape ``(n_terms,)``: without the knobs.
    knobs
        Shape ``(n_knobs, n_terms)``: power of each knob in each term.
    """

    names: tuple[str, ...]
    n_states: int
    n_sources: int
    coefficients: Array
    knob_names: tuple[str, ...]
    knobs: NDArray[np.int64]
    signal_blocks: tuple[Block, ...]
    rate_block: Block

    def weights(self, knobs: Mapping[str, Any], factors: Array | float = 1.0) -> Array:
        """Coefficient of every term with the knobs in, shape ``(n_terms,)`` or ``(n_terms, m)``.

        Parameters
        ----------
        knobs
            A number or an array of shape ``(m,)`` for each knob.
        factors
            Further factors of the coefficients, shape ``(n_terms,)`` or ``(n_terms, m)``.
        """
        values = [np.asarray(knobs[name], float) for name in self.knob_names]
        many = max((v.ndim for v in values), default=0) or np.ndim(factors) == 2
        weights: Array = (self.coefficients[:, None] if many else self.coefficients) * factors
        for value, powers in zip(values, self.knobs, strict=True):
            used = np.flatnonzero(powers)
            if many and weights.shape[1] < value.size:
                weights = np.repeat(weights, value.size, axis=1)
            power = powers[used, None] if many else powers[used]
            weights = weights.copy()
            weights[used] *= value**power
        return weights

    def bind(self, weights: Array) -> Bound:
        """The field with its coefficients fixed, ready to be evaluated."""
        return Bound(self, weights)


class Bound:
    """A Field with fixed coefficients; one column of coefficients for each run, or one for all.

    All methods take states of shape ``(n_states,)`` or ``(n_states, m)`` and sources of the like shape.
    """

    def __init__(self, field: Field, weights: Array) -> None:
        self.field = field
        self.weights = weights
        self._blocks = [(b, self._matrix(b)) for b in field.signal_blocks]
        self._rates = (field.rate_block, self._matrix(field.rate_block))

    def _matrix(self, block: Block) -> Any:
        """Matrix from products to rows, dense for small blocks; ones where every run has its own weights."""
        terms = block.rows.size
        per_run = self.weights.ndim == 2
        values = np.ones(terms) if per_run else self.weights[block.terms]
        if block.n_rows * terms <= DENSE_LIMIT**2 * 2:
            dense = np.zeros((block.n_rows, terms))
            dense[block.rows, np.arange(terms)] = values
            return dense
        from scipy.sparse import csr_array

        return csr_array((values, (block.rows, np.arange(terms))), shape=(block.n_rows, terms))

    def _apply(self, block: Block, matrix: Any, z: Array) -> Array:
        products = z.take(block.factors[0], axis=0)
        for positions in block.factors[1:]:
            products *= z.take(positions, axis=0)
        if self.weights.ndim == 2:
            products *= self.weights[block.terms]
        out: Array = matrix @ products
        return out

    def vector(self, states: Array, sources: Array | None = None) -> Array:
        """The value vector (1, states, sources, signals), shape ``(1 + n_names,)`` or ``(1 + n_names, m)``."""
        field = self.field
        z: Array = np.empty((1 + len(field.names), *states.shape[1:]))
        first = 1 + field.n_states
        z[0] = 1.0
        z[1:first] = states
        if field.n_sources:
            z[first : first + field.n_sources] = sources
        for block, matrix in self._blocks:
            z[block.places] = self._apply(block, matrix, z)
        return z

    def rates(self, states: Array, sources: Array | None = None) -> Array:
        """Time derivative of every state."""
        block, matrix = self._rates
        return self._apply(block, matrix, self.vector(states, sources))

    def all_values(self, states: Array, sources: Array | None = None) -> Array:
        """Every state, source and signal."""
        values: Array = self.vector(states, sources)[1:]
        return values

    def all_rates(self, states: Array, sources: Array | None, source_rates: Array | None) -> Array:
        """Time derivative of every state, source and signal, by the chain rule."""
        field = self.field
        z = self.vector(states, sources)
        dz = np.zeros_like(z)
        block, matrix = self._rates
        dz[1 : 1 + field.n_states] = self._apply(block, matrix, z)
        if field.n_sources:
            dz[1 + field.n_states : 1 + field.n_states + field.n_sources] = source_rates
        for block, matrix in self._blocks:
            dz[block.places] = self._apply_rate(block, matrix, z, dz)
        rates: Array = dz[1:]
        return rates

    def _apply_rate(self, block: Block, matrix: Any, z: Array, dz: Array) -> Array:
        total = np.zeros((block.rows.size, *z.shape[1:]))
        for moving in range(len(block.factors)):
            product = dz.take(block.factors[moving], axis=0)
            for other, positions in enumerate(block.factors):
                if other != moving:
                    product *= z.take(positions, axis=0)
            total += product
        if self.weights.ndim == 2:
            total *= self.weights[block.terms]
        out: Array = matrix @ total
        return out

    def jacobian(self, states: Array, sources: Array | None = None) -> Any:
        """Derivative of the rates by the states for one run, sparse, shape ``(n_states, n_states)``."""
        by_value = self.linear_part(states, sources)
        return by_value[:, : self.field.n_states].tocsc()

    def linear_part(self, states: Array, sources: Array | None = None) -> Any:
        """Derivative of the rates by (states, sources), signals eliminated: ``(n_states, n_states + n_sources)``."""
        rates, signals = self.derivatives(states, sources)
        given = self.field.n_states + self.field.n_sources
        return (rates[:, :given] + rates[:, given:] @ signals).tocsc()

    def derivatives(self, states: Array, sources: Array | None = None) -> tuple[Any, Any]:
        """Derivative of the rates by all names, and of the signals by (states, sources), earlier signals eliminated.

        Returns
        -------
        rates, signals
            Sparse, ``(n_states, n_names)`` and ``(n_signals, n_states + n_sources)``.
        """
        field = self.field
        z = self.vector(states, sources)
        given = field.n_states + field.n_sources
        count = len(field.names) - given
        direct = self._block_derivative(field.rate_block, z)
        from scipy.sparse import csr_array

        inner = csr_array((count, len(field.names)))
        for block in field.signal_blocks:
            inner = inner + self._block_derivative(block, z, count, 1 + given)
        signals = inner[:, :given]
        for _ in field.signal_blocks[1:]:
            signals = inner[:, :given] + inner[:, given:] @ signals
        return direct, signals

    def _block_derivative(self, block: Block, z: Array, n_rows: int = 0, first: int = 0) -> Any:
        from scipy.sparse import csr_array

        weights = self.weights[block.terms]
        rows = block.places[block.rows] - first if first else block.rows
        values, columns = [], []
        for moving, positions in enumerate(block.factors):
            product = weights.copy()
            for other, places in enumerate(block.factors):
                if other != moving:
                    product *= z[places]
            values.append(np.where(positions > 0, product, 0.0))
            columns.append(np.maximum(positions - 1, 0))
        triplets = (np.concatenate(values), (np.tile(rows, len(values)), np.concatenate(columns)))
        return csr_array(triplets, shape=(n_rows or block.n_rows, len(self.field.names)))


def field_of(system: System) -> Field:
    """Turn a System into arrays of term indices; time and memory grow with the number of terms only.

    Parameters
    ----------
    system
        Explicit equations; factors name states, sources, or signals that stand earlier.
    """
    names = (*(s.name for s in system.states), *(s.name for s in system.sources), *(s.name for s in system.signals))
    place = {name: i + 1 for i, name in enumerate(names)}
    groups = [(rows, np.array([place[r.name] for r in rows], np.intp)) for rows in _levels(system.signals)]
    groups.append((list(system.rows), np.zeros(0, np.intp)))
    knob_names = tuple(k.name for k in system.knobs)
    knob_place = {name: i for i, name in enumerate(knob_names)}
    terms = [t for rows, _ in groups for row in rows for t in row.terms]
    powers = np.zeros((len(knob_names), len(terms)), np.int64)
    for i, term in enumerate(terms):
        for knob in term.knobs:
            powers[knob_place[knob], i] += 1
    blocks, start = [], 0
    for rows, places in groups:
        blocks.append(_block(rows, places, place, start))
        start = blocks[-1].terms.stop
    return Field(
        names=names,
        n_states=len(system.states),
        n_sources=len(system.sources),
        coefficients=np.array([float(t.coefficient) for t in terms]),
        knob_names=knob_names,
        knobs=powers,
        signal_blocks=tuple(blocks[:-1]),
        rate_block=blocks[-1],
    )


def _levels(signals: tuple[Row, ...]) -> list[list[Row]]:
    """Signals grouped so that each group needs only earlier groups."""
    level: dict[str, int] = {}
    groups: list[list[Row]] = []
    for row in signals:
        needs = [level[name] for t in row.terms for name, _ in t.factors if name in level]
        level[row.name] = max(needs, default=-1) + 1
        if level[row.name] == len(groups):
            groups.append([])
        groups[level[row.name]].append(row)
    return groups


def _block(rows: list[Row], places: Index, place: Mapping[str, int], start: int) -> Block:
    lists = [[place[n] for n, p in t.factors for _ in range(p)] for row in rows for t in row.terms]
    degree = max((len(x) for x in lists), default=1) or 1
    factors = np.zeros((len(lists), degree), np.intp)
    for i, positions in enumerate(lists):
        factors[i, : len(positions)] = positions
    term_rows = np.repeat(np.arange(len(rows)), [len(row.terms) for row in rows]) if rows else np.zeros(0, np.intp)
    columns = np.ascontiguousarray(factors.T)
    return Block(len(rows), term_rows.astype(np.intp), columns, slice(start, start + len(lists)), places)
