"""The figures of one combination: values chosen, parts laid out, nothing simulated."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from patchplan.circuit.build import build_circuit
from patchplan.circuit.catalogue import Catalogue
from patchplan.circuit.current import supply_current
from patchplan.circuit.packages import counts_to_fit
from patchplan.circuit.switched import with_references
from patchplan.compare.predict import predicted_error, predicted_spread
from patchplan.compare.records import Option
from patchplan.equation.problem import Build
from patchplan.form.records import Form
from patchplan.patch.records import Patch
from patchplan.ranges import Ranges
from patchplan.reach.records import Reach, Reference
from patchplan.sensitivity import Sensitivity
from patchplan.sizing.records import Sizing, Target


def rated(
    build: Build, catalogue: Catalogue, reach: Reach, form: Form, patch: Patch, ranges: Ranges,
    sensitivity: Sensitivity, sizing: Sizing, target: Target,
) -> Option:  # fmt: skip
    """Predicted error and spread, what has to be fitted, and the supply current.

    Raises
    ------
    CannotBuild
        Where the parts do not serve.
    """
    if sizing.faults:
        return Option(build, fault=sizing.faults[0])
    patch, sizing = with_references(patch, sizing, target, float(form.system.duration))
    error, causes = predicted_error(form.system, patch, ranges, sensitivity, sizing, target)
    spread, apart = predicted_spread(form.system, patch, sensitivity, sizing, target)
    whole = _of_peak(sensitivity, reach.reference)
    of_peak = None
    if whole is not sensitivity:
        of_peak = (
            predicted_error(form.system, patch, ranges, whole, sizing, target)[0],
            predicted_spread(form.system, patch, whole, sizing, target)[0],
        )
    circuit = build_circuit(form, patch, sizing, target, build, catalogue, stand_ins=reach.reference.waveforms)
    packages, parts = counts_to_fit(circuit.parts)
    return Option(
        build,
        error_percent=error,
        spread_percent=spread,
        parts=parts,
        packages=packages,
        supply_current=supply_current(circuit, catalogue, _mean_volts(patch, ranges, sizing)),
        speed=float(form.system.time_unit_seconds) / sizing.time_scale,
        causes=causes,
        spread_causes=apart,
        of_peak=of_peak,
    )


def _of_peak(sensitivity: Sensitivity, reference: Reference) -> Sensitivity:
    """The responses as fractions of each watched signal's whole peak; itself where they are that already."""
    peaks = np.array([np.abs(reference.of(name)).max() or 1.0 for name in sensitivity.watched])
    share = (sensitivity.base / peaks)[:, None]
    if np.allclose(share, 1.0):
        return sensitivity
    return replace(
        sensitivity,
        base=peaks,
        coefficient=sensitivity.coefficient * share[:, None],
        rate=sensitivity.rate * share[:, None],
        lag=sensitivity.lag * share[:, None],
        start={name: response * share for name, response in sensitivity.start.items()},
        leak={name: response * share for name, response in sensitivity.leak.items()},
    )


def _mean_volts(patch: Patch, ranges: Ranges, sizing: Sizing) -> dict[str, float]:
    """Mean magnitude of every node over the nominal run [V]."""
    times = ranges.times
    span = float(times[-1] - times[0]) or 1.0
    means = {}
    for stage in patch.stages:
        if stage.node in ranges.values:
            mean = float(np.trapezoid(np.abs(ranges.values[stage.node]), times)) / span
            means[stage.node] = mean * sizing.scales[stage.node].volts_per_unit
    return means
