"""What named parts make of every row: the board as built, switches and finite bandwidth counted."""

from __future__ import annotations

from collections.abc import Mapping
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.model import Model
from patchplan.sizing.records import Leg, Target

Array = NDArray[np.float64]


def residual_of(model: Model, target: Target, parts: Mapping[tuple[str, int | str], tuple[float, ...]]) -> Array:
    """Log of each row's product or ratio less the constant part of the one wanted, r - b, shape ``(n_rows,)``.

    All legs of a stage share the operate switch, so that Ron counts as Ron * sum(1/R), and so do all legs from a source
    that is switched from the reference; at infinite gain an integrator of gains g is slower by 1 + sum(g)/w_t (Franco
    2019). R is what the summing node sees.
    """
    extra: dict[str, float] = {}
    residual = np.zeros(len(model.ratios))
    for row, ratio in enumerate(model.ratios):
        if ratio.kind == "start":
            first, second = parts[ratio.stage, -1]
            residual[row] = log(second / first)
            continue
        leg = Leg(parts[ratio.stage, ratio.wire])
        residual[row] = log(leg.transfer)
        if ratio.kind == "integrator":
            farad = parts[ratio.stage, "C"][0]
            residual[row] += log(farad)
            slow = target.switch_on + 1.0 / (farad * target.op_amp.gain_bandwidth)
            extra[ratio.stage] = extra.get(ratio.stage, 0.0) + slow / leg.into
        elif (ratio.stage, "Rf") in parts:
            residual[row] -= log(parts[ratio.stage, "Rf"][0])
        if ratio.switched:
            extra[ratio.switched] = extra.get(ratio.switched, 0.0) + target.switch_on / leg.into
    for row, ratio in enumerate(model.ratios):
        if ratio.kind == "integrator":
            residual[row] += np.log1p(extra[ratio.stage])
        if ratio.switched:
            residual[row] += np.log1p(extra[ratio.switched])
        residual[row] -= ratio.want.constant
    return residual
