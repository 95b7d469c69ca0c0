"""Purchasable values whose rounding cancels around the loops.

With the logs of the chosen values y and r = B y, only the part of r - b outside the range of A is a real error: scale
factors and speed take up the rest. The descent moves one value or two at a time and looks at that part alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Loops:
    """The independent loops of a weighted system r = b + A theta + e.

    Attributes
    ----------
    basis
        Orthonormal basis of what theta cannot reach, shape ``(n_rows, n_loops)``.
    weights
        Row weights, shape ``(n_rows,)``.
    """

    basis: Array
    weights: Array

    def errors(self, residual: Array) -> Array:
        """Loop errors of residuals r - b, shape ``(n_loops,)``."""
        loops: Array = self.basis.T @ (self.weights * residual)
        return loops


def find_loops(matrix: Array, weights: Array) -> Loops:
    """Left null space of the weighted system by a complete QR decomposition with pivoting."""
    from scipy.linalg import null_space

    if matrix.shape[1] == 0:
        return Loops(np.eye(len(weights)), weights)
    return Loops(null_space((weights[:, None] * matrix).T), weights)


@dataclass(frozen=True)
class Menu:
    """Moves: move k sets the unknowns marked in column k to the log values there.

    Attributes
    ----------
    touched, value
        Shape ``(n_unknowns, n_moves)``. A move of one resistor touches one unknown; a move of a capacitor takes all
        resistors of its stage along.
    """

    touched: Array
    value: Array


def descend(loops: Loops, incidence: Array, offset: Array, menu: Menu, start: Array, *, sweeps: int = 200) -> Array:
    """Descend on the squared loop errors over single and paired moves.

    Parameters
    ----------
    incidence
        B, shape ``(n_rows, n_unknowns)``.
    offset
        b less what is fixed, shape ``(n_rows,)``: residual = B y - offset.
    menu
        Candidate moves.
    start
        Log values to begin from, shape ``(n_unknowns,)``.
    sweeps
        Most moves taken.

    Returns
    -------
    Array
        Log values, shape ``(n_unknowns,)``, from which no single or paired move of the menu improves.
    """
    effect = loops.basis.T @ (loops.weights[:, None] * incidence)
    y = start.copy()
    clash = (menu.touched.T @ menu.touched) > 0
    target = effect @ (menu.touched * menu.value)
    for _ in range(sweeps if effect.size and menu.value.size else 0):
        errors = loops.errors(incidence @ y - offset)
        change = target - effect @ (menu.touched * y[:, None])
        single = 2.0 * (errors @ change) + np.einsum("lk,lk->k", change, change)
        paired = single[:, None] + single[None, :] + 2.0 * (change.T @ change)
        paired[clash] = np.inf
        first, second = divmod(int(np.argmin(paired)), len(single))
        alone = int(np.argmin(single))
        moves = [alone] if single[alone] <= paired[first, second] else [first, second]
        if min(single[alone], paired[first, second]) > -1e-14:
            break
        for move in moves:
            y = np.where(menu.touched[:, move] > 0, menu.value[:, move], y)
    return y


def split_rest(matrix: Array, target: Array, weights: Array, low: Array, high: Array) -> tuple[Array, float]:
    """Theta inside its bounds that shares the rest out: least largest weighted error first, then most exact rows.

    Two linear programs (HiGHS through scipy): minimise max |w (r - b - A theta)|, then sum |w (r - b - A theta)| at
    that maximum.

    Returns
    -------
    tuple
        theta, shape ``(n_theta,)``, and the largest weighted error; (centre, inf) where no theta fits.
    """
    from scipy.optimize import linprog

    rows, columns = matrix.shape
    if rows == 0 or columns == 0:
        return (low + high) / 2, float(np.max(np.abs(weights * target), initial=0.0))
    a = weights[:, None] * matrix
    r = weights * target
    ones = np.ones((rows, 1))
    upper = np.block([[a, -ones], [-a, -ones]])
    limits = np.concatenate([r, -r])
    bounds = [*zip(low, high, strict=True), (0, None)]
    worst = linprog(np.r_[np.zeros(columns), 1.0], A_ub=upper, b_ub=limits, bounds=bounds)
    if worst.x is None:
        return (low + high) / 2, float("inf")
    most = float(np.asarray(worst.x)[-1]) * (1 + 1e-9) + 1e-12
    spread = np.block([[a, -np.eye(rows)], [-a, -np.eye(rows)]])
    cost = np.r_[np.zeros(columns), np.ones(rows)]
    fine = linprog(cost, A_ub=spread, b_ub=limits, bounds=[*zip(low, high, strict=True), *[(0, most)] * rows])
    theta = np.asarray((fine if fine.x is not None else worst).x, dtype=float)[:columns]
    return theta, float(np.max(np.abs(r - a @ theta)))
