"""What every engineer expects of an integrator, on whole planned boards (common practice, no source)."""

from __future__ import annotations

import numpy as np
import pytest

from patchplan.equation.reader import read_problem
from patchplan.pipeline import plan as make_plan

TONES = """equations = ["low' = cos(40*t)", "middle' = cos(80*t)", "high' = cos(160*t)"]
duration = 1.0
[start]
low = 0
middle = 0
high = 0
[build]
run = "once"
"""


def test_an_integrators_gain_falls_6_db_per_octave() -> None:
    """Common practice, no source: 20 log10(2) = 6.02 dB from one octave to the next, in the board's own waveforms."""
    verdict = make_plan(read_problem(TONES)).verdict
    swing = {curve.name: np.ptp(curve.circuit) for curve in verdict.curves}
    falls = 20 * np.log10([swing["low"] / swing["middle"], swing["middle"] / swing["high"]])
    # 0.05 dB: half a percent, which is more than rounding and finite gain may cost here.
    assert falls == pytest.approx(20 * np.log10(2), abs=0.05)
