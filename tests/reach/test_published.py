"""The Reference of every polynomial case against its published or twice computed samples."""

from __future__ import annotations

import numpy as np
import pytest

from patchplan.equation.explicit import build_system
from patchplan.equation.reader import read_problem
from patchplan.reach.curves import resample
from patchplan.reach.reference import find_reach
from tests.cases.convert import FUNCTIONS_OF_STATES, problem_text, read_cases

CASES = {name: case for name, case in read_cases().items() if name not in FUNCTIONS_OF_STATES}


@pytest.mark.parametrize("name", CASES)
def test_samples_and_ranges(name, tmp_path):
    # cases/README.md: two independent integrations that agree to 1e-10 of the peak or better.
    case, file = CASES[name], tmp_path / "case.toml"
    file.write_text(problem_text(case), encoding="utf-8")
    problem = read_problem(file)
    reach = find_reach(build_system(problem), {}, problem.build)
    reference, given = reach.reference, case["reference"]
    times = np.array(given["sample_times"])
    names = [n for n in given["samples"] if n in reference.names]
    assert names
    for signal in names:
        row, peak = reference.names.index(signal), given["peak_abs"][signal]["value"]
        exact = resample(reference.times, reference.values[row], reference.rates[row], times)
        np.testing.assert_allclose(exact, given["samples"][signal], atol=2e-7 * peak, rtol=0)
        straight = np.interp(times, reference.times, reference.values[row])
        np.testing.assert_allclose(straight, given["samples"][signal], atol=1e-4 * peak, rtol=0)
        low, high = given["range"][signal]
        found = reach.ranges[signal]
        # The ends given are those of samples, about 1e-4 short at worst; the peak is that of the curve.
        assert found.low < low + 1e-6 * peak
        assert found.high > high - 1e-6 * peak
        if found.known_by == "proved":
            assert found.peak == pytest.approx(peak, rel=2e-7)
            assert found.low == pytest.approx(low, abs=1e-4 * peak)
            assert found.high == pytest.approx(high, abs=1e-4 * peak)
