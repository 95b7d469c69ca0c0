"""Functions of time as numbers: closed formulas and recordings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from patchplan.equation.problem import Recording
from patchplan.equation.tree import Node

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Waveform:
    """A known function of time, in problem units of signal and time.

    Attributes
    ----------
    tree
        Formula in ``t`` alone (parameters already numbers), or None for a recording.
    recording
        Rows of the recording, or None for a formula.
    """

    tree: Node | None = None
    recording: Recording | None = None
