"""What switches and the op amp's finite bandwidth add to each R*C or ratio."""

from __future__ import annotations

from collections.abc import Mapping
from math import log

import numpy as np
from numpy.typing import NDArray

from patchplan.sizing.model import Model, Ratio
from patchplan.sizing.records import Leg, Target

Array = NDArray[np.float64]


def added_logs(
    ratios: tuple[Ratio, ...], target: Target, resistance: Array, capacitance: Array, load: Array | None = None
) -> Array:
    """log of what is added to each row, shape ``(n_rows,)``.

    All legs of a stage share the operate switch, so that Ron counts as Ron * sum(1/R), and so do all legs from a source
    that is switched from the reference; at infinite gain an integrator of gains g is slower by 1 + sum(g)/w_t (Franco
    2019).

    Parameters
    ----------
    resistance
        What the summing node sees of each row's leg, shape ``(n_rows,)`` [ohm]; of no matter for start values.
    capacitance
        Of each row's stage, shape ``(n_rows,)`` [F]; of no matter but for integrators.
    load
        What the source sees of each row's leg, where that is not the same [ohm].
    """
    extra: dict[str, float] = {}
    at_source = resistance if load is None else load
    for ratio, ohm, fed, farad in zip(
        ratios, resistance.tolist(), at_source.tolist(), capacitance.tolist(), strict=True
    ):
        if ratio.switched:
            extra[ratio.switched] = extra.get(ratio.switched, 0.0) + target.switch_on / fed
        if ratio.kind == "integrator":
            slow = 1.0 / (ohm * farad * target.op_amp.gain_bandwidth)
            extra[ratio.stage] = extra.get(ratio.stage, 0.0) + target.switch_on / ohm + slow
    shares = [(extra[r.stage] if r.kind == "integrator" else 0.0, extra.get(r.switched, 0.0)) for r in ratios]
    total: Array = np.log1p(np.array(shares).reshape(-1, 2)).sum(axis=1)
    return total


def residual_of(
    model: Model,
    target: Target,
    parts: Mapping[tuple[str, int | str], tuple[float, ...]],
    joins: Mapping[tuple[str, int | str], str] | None = None,
) -> Array:
    """What named parts make of every row: log of its product or ratio, losses counted, less b, shape ``(n_rows,)``."""
    made, ohm, load, farad = np.zeros((4, len(model.ratios)))
    for row, ratio in enumerate(model.ratios):
        made[row] = -ratio.want.constant
        ohm[row] = load[row] = farad[row] = 1.0
        if ratio.kind == "start":
            first, second = parts[ratio.stage, -1]
            made[row] += log(second / first)
            continue
        leg = Leg(parts[ratio.stage, ratio.wire], (joins or {}).get((ratio.stage, ratio.wire), ""))
        ohm[row], load[row] = leg.into, leg.load
        made[row] += log(leg.transfer)
        if ratio.kind == "integrator":
            (farad[row],) = parts[ratio.stage, "C"]
            made[row] += log(farad[row])
        elif (ratio.stage, "Rf") in parts:
            made[row] -= log(parts[ratio.stage, "Rf"][0])
    return np.asarray(made + added_logs(model.ratios, target, ohm, farad, load))
