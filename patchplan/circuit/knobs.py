"""Potentiometers of adjustable parameters: track, end resistors, setting, and what the travel covers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.errors import CannotBuild
from patchplan.patch.records import Stage
from patchplan.sizing.records import Leg

Array = NDArray[np.float64]
#: Tracks that are sold, 1-2-5 steps [ohm] (common practice, no source).
TRACKS = tuple(float(m * 10**d) for d in range(2, 7) for m in (1, 2, 5) if m * 10**d <= 2_000_000)
#: Tolerance of a track (common practice, no source).
TRACK_TOLERANCE = 0.2
#: Track of a potentiometer across two outputs: light to drive, low against the resistor after the wiper [ohm].
BIPOLAR_TRACK = 10e3
#: End resistors are no longer than this many tracks.
MOST_TRACKS = 10.0
#: What a bend of the law by one range costs, beside the log of a travel that is too long.
BEND = 0.5
#: What the resistor across a track has to gain to be worth fitting, in logs of the range.
WORTH = 0.02


@dataclass(frozen=True, slots=True)
class Dial:
    """A potentiometer with its end resistors.

    Attributes
    ----------
    fixed
        In series with a rheostat, 0 for none: the low end of its travel [ohm].
    track
        [ohm].
    setting
        Nominal, 0 to 1.
    low, high
        Settings at the ends of the knob's range.
    parallel
        Across a rheostat, 0 for none: the high end of its travel [ohm].
    end_a, end_b
        Between a potentiometer's ends and what drives them, 0 for none [ohm].
    """

    fixed: float
    track: float
    setting: float
    low: float
    high: float
    parallel: float = 0.0
    end_a: float = 0.0
    end_b: float = 0.0

    @property
    def fixed_resistors(self) -> list[float]:
        """All resistors beside the track [ohm]."""
        return [r for r in (self.fixed, self.parallel, self.end_a, self.end_b) if r]

    def ohms(self, settings: Array, track: float | None = None) -> Array:
        """Resistance of the rheostat with its resistors [ohm]; ``track`` where it is off its nominal value."""
        used = settings * (track or self.track)
        found: Array = self.fixed + (used * self.parallel / (used + self.parallel) if self.parallel else used)
        return found


def rheostat(
    per_unit: float, nominal: float, ends: tuple[float, float], resistors: Sequence[float], tolerance: float = 0.01
) -> Dial:
    """Feedback resistance per_unit * |knob| as a rheostat, a resistor in series and, where it helps, one across it.

    The travel covers the range whatever the tolerances of track and resistors, and as little more as can be had.

    Parameters
    ----------
    per_unit
        Feedback resistance per unit of the knob [ohm].
    nominal, ends
        The knob's value and range, one sign.
    resistors
        Values to choose from [ohm].
    tolerance
        Of the resistors.

    Raises
    ------
    CannotBuild
        Where no track is long enough.
    """
    lowest, highest = sorted(per_unit * abs(e) for e in ends)
    fixed = max((r for r in resistors if r <= lowest / (1 + tolerance)), default=0.0)
    needed = highest - fixed * (1 - tolerance)
    across = np.array([np.inf, *(r for r in resistors if r != fixed)])
    tracks = np.array(TRACKS)[:, None]
    longest, shortest = _beside(tracks, across), _beside(tracks * (1 - TRACK_TOLERANCE), across * (1 - tolerance))
    fits = shortest >= needed * (1 - 1e-9)
    if not fits.any():
        raise CannotBuild(
            f"A knob needs a rheostat of {needed:.3g} ohm; the longest track is {TRACKS[-1]:.3g} ohm, "
            f"{100 * TRACK_TOLERANCE:g} % less by its tolerance. "
            "Choose a narrower range of the parameter or smaller resistor limits."
        )
    # A rheostat with a resistor across it is bent most at the square root; x/(1 + x) peaks there by algebra.
    bend = (np.sqrt(1 + tracks / across) - 1) ** 2 / (tracks / across + 1e-300)
    cost = np.log(longest / max(highest - fixed, 1e-9 * highest)) + BEND * bend + WORTH * np.isfinite(across)
    best = int(np.argmin(np.where(fits, cost, np.inf)))
    track, parallel = TRACKS[best // len(across)], float(across[best % len(across)])

    def setting(knob: float) -> float:
        ohm = max(per_unit * abs(knob) - fixed, 0.0)
        return ohm / (1 - ohm / parallel) / track

    return Dial(
        fixed, track, setting(nominal), setting(ends[0]), setting(ends[1]), parallel if np.isfinite(parallel) else 0.0
    )


def _beside(one: Array, other: Array) -> Array:
    """Two resistances side by side."""
    both: Array = one / (1 + one / other)
    return both


@dataclass(frozen=True, slots=True)
class Crossing:
    """A potentiometer between both polarities of a signal, its wiper into a leg: gain against setting.

    The loaded wiper has the source resistance of the two halves side by side, which counts in series with the leg.

    Attributes
    ----------
    ratio
        -v_end_b / v_end_a, 1 where both polarities have the same scale.
    leg, feedback
        Of the stage, feedback in [ohm].
    """

    ratio: float
    leg: Leg
    feedback: float

    def gain(
        self, settings: Array | float, track: float, end_a: Array | float = 0.0, end_b: Array | float = 0.0
    ) -> Array:
        """v_out / v_end_a, resistances in [ohm]."""
        # Source resistance ahead of a T counts more than once.
        weight = 1 + self.leg.resistors[2] / self.leg.resistors[1] if self.leg.is_network else 1.0
        whole = end_a + track + end_b
        share = (end_a + settings * track) / whole
        source = share * (1 - share) * whole
        return np.asarray(-self.feedback * (1 - share - self.ratio * share) / (self.leg.transfer + weight * source))


def crossing(
    stage: Stage, gains: tuple[float, float, float], law: Crossing, resistors: Sequence[float], tolerance: float = 0.01
) -> Dial:
    """Potentiometer whose travel covers a range through zero, with end resistors where an end lies short of full scale.

    Parameters
    ----------
    gains
        Wanted v_out / v_end_a at the knob's nominal value and the ends of its range.
    resistors, tolerance
        Values to choose end resistors from [ohm], and their tolerance.

    Raises
    ------
    CannotBuild
        Where the nominal gain is out of reach.
    """
    from scipy.optimize import brentq

    low, high = min(gains[1:]), max(gains[1:])
    ends = np.array([0.0, *(r for r in resistors if r <= MOST_TRACKS * BIPOLAR_TRACK)])
    a, b = ends[:, None], ends[None, :]
    # Short of track and long of ends, with every gain low by the tolerance of two resistors: the range must still fit.
    least = BIPOLAR_TRACK * (1 - TRACK_TOLERANCE), a * (1 + tolerance), b * (1 + tolerance)
    sure = 1 - 2 * tolerance
    fits = (law.gain(0.0, *least) * sure <= low) & (law.gain(1.0, *least) * sure >= high)
    fits &= (a != b) | (a == 0.0)
    lost = law.gain(1.0, BIPOLAR_TRACK, a, b) - law.gain(0.0, BIPOLAR_TRACK, a, b)
    row, column = divmod(int(np.argmin(np.where(fits, lost, np.inf))), len(ends)) if fits.any() else (0, 0)
    end_a, end_b = float(ends[row]), float(ends[column])

    def gain(at: float) -> float:
        return float(law.gain(at, BIPOLAR_TRACK, end_a, end_b))

    def setting(wanted: float) -> float:
        # An end of the range that rounding puts just outside is the end of the track.
        if wanted <= gain(0.0):
            return 0.0
        return 1.0 if wanted >= gain(1.0) else float(brentq(lambda at: gain(at) - wanted, 0.0, 1.0, xtol=1e-13))

    if not gain(0.0) * (1 + 1e-9) <= gains[0] <= gain(1.0) * (1 + 1e-9):
        raise CannotBuild(
            f"The knob of stage {stage.name} should give a gain of {gains[0]:.4g}; its potentiometer reaches "
            f"{gain(0.0):.4g} to {gain(1.0):.4g}. The feedback resistor has to fit the largest magnitude of the knob."
        )
    at, at_low, at_high = (setting(g) for g in gains)
    return Dial(0.0, BIPOLAR_TRACK, at, at_low, at_high, 0.0, end_a, end_b)
