"""What errors of rows do to the watched signals, and the scale factors that make what values leave over count least."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
#: Weight of the largest coefficient error against the largest predicted error when the rest is shared out.
ROW_SHARE = 0.3


@dataclass(frozen=True)
class Effect:
    """What row errors do to the watched signals.

    Attributes
    ----------
    response
        Shape ``(n_points, n_rows)``: change of a watched signal at one time, as a fraction of peak, per unit of
        residual r - b - A theta of a row.
    base
        Shape ``(n_points,)``: error that is there already, such as lag.
    """

    response: Array
    base: Array

    @property
    def row_weight(self) -> float:
        """Weight of row errors beside predicted ones; it grows with the largest response, so that both count on
        sensitive and on docile problems, and a linear prediction is not trusted with large errors.
        """
        return max(1.0, 0.1 * float(np.abs(self.response).max(initial=0.0)))


@dataclass(frozen=True)
class Loops:
    """The part of the predicted error that no theta can take away: basis' (shape (r - b) + base).

    Attributes
    ----------
    basis
        Orthonormal, shape ``(n_rows, n_loops)``.
    shape
        Square root of the error measure, shape ``(n_rows, n_rows)``.
    base
        Shape ``(n_rows,)``.
    fit
        Least-squares theta of residuals, shape ``(n_theta, n_rows)``.
    """

    basis: Array
    shape: Array
    base: Array
    fit: Array

    def outside(self, residual: Array, low: Array, high: Array) -> float:
        """How far the best theta lies outside its bounds, in logs: about what staying inside costs in error."""
        theta = self.fit @ (self.shape @ residual + self.base)
        return float(np.max(np.maximum(low - theta, theta - high), initial=0.0))

    def errors(self, residual: Array) -> Array:
        """Loop errors of residuals r - b, shape ``(n_loops,)``."""
        loops: Array = self.basis.T @ (self.shape @ residual + self.base)
        return loops


def find_loops(matrix: Array, effect: Effect) -> Loops:
    """Loops under the measure (mean square of the predicted error) + (row weight * row errors)^2.

    The second part keeps single coefficients near even where the watched signals hardly show them.
    """
    from scipy.linalg import null_space, qr

    points, rows = effect.response.shape
    stacked = np.vstack([effect.response / np.sqrt(max(points, 1)), effect.row_weight * np.eye(rows)])
    q, shape = qr(stacked, mode="economic")
    base = q[:points].T @ (effect.base / np.sqrt(max(points, 1)))
    basis = null_space((shape @ matrix).T) if matrix.shape[1] else np.eye(rows)
    return Loops(basis, shape, base, np.linalg.pinv(shape @ matrix))


def split_rest(matrix: Array, residual: Array, effect: Effect, low: Array, high: Array) -> tuple[Array, float]:
    """Theta inside its bounds that shares the rest out, and the largest predicted error of a watched signal.

    A linear program (HiGHS through scipy): least sum of the largest predicted error and a share of the largest
    row error, so that coefficients which the watched signals hardly show stay near, too.

    Returns
    -------
    tuple
        theta, shape ``(n_theta,)``, and the predicted error as a fraction of peak; (centre, inf) where no theta fits.
    """
    from scipy.optimize import linprog

    rows, columns = matrix.shape
    if rows == 0 or columns == 0:
        return (low + high) / 2, _predicted(effect, residual)
    seen, share = effect.response @ matrix, effect.response @ residual + effect.base
    point, one = np.ones((len(share), 1)), np.ones((rows, 1))
    none_p, none_r = np.zeros((len(share), 1)), np.zeros((rows, 1))
    upper = np.block([[-seen, -point, none_p], [seen, -point, none_p], [-matrix, none_r, -one], [matrix, none_r, -one]])
    limits = np.concatenate([-share, share, -residual, residual])
    bounds = [*zip(low, high, strict=True), (0, None), (0, None)]
    worst = linprog(
        np.r_[np.zeros(columns), 1.0, ROW_SHARE * effect.row_weight], A_ub=upper, b_ub=limits, bounds=bounds
    )
    if worst.x is None:
        return (low + high) / 2, float("inf")
    theta = np.asarray(worst.x, dtype=float)[:columns]
    return theta, _predicted(effect, residual - matrix @ theta)


def merit(effect: Effect, residual: Array) -> float:
    """What :func:`split_rest` makes small: the largest predicted error plus a share of the largest row error."""
    rows = float(np.max(np.abs(residual), initial=0.0))
    return _predicted(effect, residual) + ROW_SHARE * effect.row_weight * rows


def _predicted(effect: Effect, residual: Array) -> float:
    return float(np.max(np.abs(effect.response @ residual + effect.base), initial=0.0))
