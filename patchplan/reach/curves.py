"""Curves given by samples and slopes: extremes, resampling, grids that are fine enough."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

#: Linear interpolation between rows may err by this part of a signal's peak.
LINEAR_ERROR = 0.8e-4


def extremes(times: Array, values: Array, rates: Array) -> tuple[Array, Array]:
    """Lowest and highest value of each curve, turning points between samples included.

    Between two samples the curve is the cubic that matches values and slopes (Hermite); its turning points are found in
    closed form.

    Parameters
    ----------
    times
        Shape ``(n,)``, rising; equal times mark a jump.
    values, rates
        Shape ``(..., n)``.

    Returns
    -------
    low, high
        Shape ``(...)``.
    """
    low, high = values.min(axis=-1), values.max(axis=-1)
    h = np.diff(times)
    # Only where the slope changes its sign can the curve turn beyond its samples.
    turning = (rates[..., :-1] * rates[..., 1:] < 0) & (h > 0)
    if not turning.any():
        return low, high
    *where, at = np.nonzero(turning)
    left, right = (*where, at), (*where, at + 1)
    step = h[at]
    a, b = values[left], values[right]
    p, q = rates[left] * step, rates[right] * step
    # y(s) = a + p s + c2 s^2 + c3 s^3 on 0 <= s <= 1; opposite slopes leave exactly one turning point inside.
    c2, c3 = 3 * (b - a) - 2 * p - q, p + q - 2 * (b - a)
    root = np.sqrt(np.maximum(c2 * c2 - 3 * c3 * p, 0.0))
    slope = c2 + np.where(p > 0, -1.0, 1.0) * root
    # Squares of curves below 1e-150 or so vanish; such a curve turns nowhere that matters.
    s = np.clip(-p / np.where(slope == 0.0, np.inf, slope), 0.0, 1.0)
    turn = a + s * (p + s * (c2 + s * c3))
    lows, highs = np.atleast_1d(low).copy(), np.atleast_1d(high).copy()
    spot = tuple(where) if where else (np.zeros_like(at),)
    np.minimum.at(lows, spot, turn)
    np.maximum.at(highs, spot, turn)
    return lows.reshape(low.shape), highs.reshape(high.shape)


def resample(times: Array, values: Array, rates: Array, wanted: Array) -> Array:
    """Values at other times by the cubic that matches values and slopes, shape ``(..., n_wanted)``."""
    left = np.clip(np.searchsorted(times, wanted, side="right") - 1, 0, len(times) - 2)
    # searchsorted lands behind a jump, so only an interval at the very end can have length 0.
    step = times[left + 1] - times[left]
    safe = np.where(step > 0, step, 1.0)
    s = np.where(step > 0, (wanted - times[left]) / safe, 1.0)
    a, b = values[..., left], values[..., left + 1]
    p, q = rates[..., left] * step, rates[..., left + 1] * step
    c2, c3 = 3 * (b - a) - 2 * p - q, p + q - 2 * (b - a)
    out: Array = a + s * (p + s * (c2 + s * c3))
    return out


def linear_error(times: Array, values: Array, rates: Array) -> Array:
    """How far linear interpolation errs in each interval, ``(n - 1,)``: the largest part of any curve's peak."""
    h = np.diff(times)
    peak = np.abs(values).max(axis=-1, keepdims=True)
    peak = np.where(peak > 0, peak, 1.0)
    rise = np.diff(values, axis=-1)
    p, q = rates[..., :-1] * h, rates[..., 1:] * h
    # A cubic's second derivative is largest at an end; a chord errs by at most an eighth of it.
    bend = np.maximum(np.abs(6 * rise - 4 * p - 2 * q), np.abs(6 * rise - 2 * p - 4 * q)) / 8
    out: Array = np.where(h > 0, (bend / peak).reshape(-1, h.size).max(axis=0, initial=0.0), 0.0)
    return out


def refined(times: Array, error: Array, *, most: int, aim: float = LINEAR_ERROR) -> Array:
    """Grid with each interval split so that its linear interpolation error comes down to ``aim``.

    The error falls with the square of the step. Where the grid would exceed ``most`` points the aim is loosened evenly.
    """
    parts = np.ceil(np.sqrt(error / aim)).clip(1)
    if parts.sum() >= most:
        parts = np.ceil(parts * (0.5 * most / parts.sum())).clip(1)
    counts = parts.astype(int)
    first = np.repeat(times[:-1], counts)
    inner = np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
    grid = first + np.repeat(np.diff(times) / counts, counts) * inner
    return np.append(grid, times[-1])


@dataclass(frozen=True)
class Curves:
    """Several curves on one grid.

    Attributes
    ----------
    times
        Shape ``(n,)``, rising; equal times mark a jump.
    values, rates
        Shape ``(n_curves, n)``.
    """

    times: Array
    values: Array
    rates: Array

    @property
    def jumps(self) -> Array:
        """Times that stand twice in the grid."""
        found: Array = self.times[1:][np.diff(self.times) == 0]
        return found

    def at(self, wanted: Array) -> tuple[Array, Array]:
        """Values (cubic) and rates (linear) at other times."""
        left = np.clip(np.searchsorted(self.times, wanted, side="right") - 1, 0, len(self.times) - 2)
        step = self.times[left + 1] - self.times[left]
        share = np.where(step > 0, (wanted - self.times[left]) / np.where(step > 0, step, 1.0), 1.0)
        rates = self.rates[:, left] * (1 - share) + self.rates[:, left + 1] * share
        return resample(self.times, self.values, self.rates, wanted), rates

    def jump(self, time: float) -> tuple[Array, Array, Array]:
        """Rise of the values, rise of the rates, and the values after a jump, each of shape ``(n_curves,)``."""
        first = int(np.searchsorted(self.times, time, side="left"))
        before, after = self.values[:, first], self.values[:, first + 1]
        return after - before, self.rates[:, first + 1] - self.rates[:, first], after

    def coarse_ends(self, every: int) -> Array:
        """Every so many times of the grid, its end and its jumps."""
        return np.unique(np.concatenate((self.times[::every], self.times[-1:], self.jumps)))
