"""Potentiometers of adjustable parameters: track, setting and what the dial covers."""

from __future__ import annotations

from dataclasses import dataclass

from patchplan.errors import CannotBuild
from patchplan.patch.records import Stage
from patchplan.sizing.records import Leg

#: Tracks that are sold, 1-2-5 steps [ohm] (common practice, no source).
TRACKS = tuple(float(m * 10**d) for d in range(2, 7) for m in (1, 2, 5) if m * 10**d <= 2_000_000)
#: Tolerance of a track (common practice, no source).
TRACK_TOLERANCE = 0.2
#: Track of a potentiometer across two outputs: light to drive, low against the resistor after the wiper [ohm].
BIPOLAR_TRACK = 10e3


@dataclass(frozen=True, slots=True)
class Dial:
    """A potentiometer with its fixed resistor.

    Attributes
    ----------
    fixed
        In series with a rheostat, 0 for none [ohm].
    track
        [ohm].
    setting
        Nominal, 0 to 1.
    low, high
        Settings at the ends of the knob's range.
    """

    fixed: float
    track: float
    setting: float
    low: float
    high: float


def rheostat(per_unit: float, nominal: float, ends: tuple[float, float], resistors: tuple[float, ...]) -> Dial:
    """Feedback resistance per_unit * |knob| as a fixed resistor and a rheostat.

    Parameters
    ----------
    per_unit
        Feedback resistance per unit of the knob [ohm].
    nominal, ends
        The knob's value and range, one sign.
    resistors
        Values to choose the fixed one from [ohm].

    Raises
    ------
    CannotBuild
        Where no track is long enough.
    """
    lowest, highest = sorted(per_unit * abs(e) for e in ends)
    fixed = max((r for r in resistors if r <= lowest * (1 + 1e-9)), default=0.0)
    needed = highest - fixed
    track = next((t for t in TRACKS if t >= needed * (1 - 1e-9)), None)
    if track is None:
        raise CannotBuild(
            f"A knob needs a rheostat of {needed:.3g} ohm; the longest track is {TRACKS[-1]:.3g} ohm. "
            "Choose a narrower range of the parameter or smaller resistor limits."
        )
    low, high = ((per_unit * abs(e) - fixed) / track for e in ends)
    return Dial(fixed, track, (per_unit * abs(nominal) - fixed) / track, low, high)


def crossing(stage: Stage, gains: tuple[float, float, float], ratio: float, leg: Leg, feedback: float) -> Dial:
    """Potentiometer between both polarities of a signal, its wiper into the leg.

    The loaded wiper has the source resistance a(1-a)*track, which counts in series with the leg.

    Parameters
    ----------
    gains
        Wanted v_out / v_end_a at the knob's nominal value and the ends of its range.
    ratio
        -v_end_b / v_end_a, 1 where both polarities have the same scale.

    Raises
    ------
    CannotBuild
        Where the nominal gain is out of reach.
    """
    from scipy.optimize import brentq

    # Source resistance ahead of a T counts more than once.
    weight = 1.0 if len(leg.resistors) == 1 else 1 + leg.resistors[2] / leg.resistors[1]

    def gain(a: float) -> float:
        return -feedback * (1 - a - ratio * a) / (leg.transfer + weight * a * (1 - a) * BIPOLAR_TRACK)

    def setting(wanted: float) -> float:
        # An end of the range that rounding puts just outside is the end of the track.
        if wanted <= gain(0.0):
            return 0.0
        return 1.0 if wanted >= gain(1.0) else float(brentq(lambda a: gain(a) - wanted, 0.0, 1.0, xtol=1e-13))

    if not gain(0.0) * (1 + 1e-9) <= gains[0] <= gain(1.0) * (1 + 1e-9):
        raise CannotBuild(
            f"The knob of stage {stage.name} should give a gain of {gains[0]:.4g}; its potentiometer reaches "
            f"{gain(0.0):.4g} to {gain(1.0):.4g}. The feedback resistor has to fit the largest magnitude of the knob."
        )
    return Dial(0.0, BIPOLAR_TRACK, *(setting(g) for g in gains))
