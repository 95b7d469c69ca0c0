"""Predicted error against speed beside the full simulation of the same boards, over the whole window.

Every board has exact values at its speed, so that rounding, which no speed mends, is in neither.
"""

from __future__ import annotations

import sys
import tempfile
from pathlib import Path

import numpy as np

from patchplan.compare.predict import predicted_error
from tests.compare.exact_boards import checked, exact_board
from tests.plans import Plans

#: A lossless loop, a damped plant, products, a filter, a drifting integrator, a slow plant.
NAMES = ("oscillator", "seat_suspension", "van_der_pol", "butterworth_4_step", "integrator", "tank_real_time")
POINTS = 7
#: Where both are below this [% of peak] the tolerance of the simulation is part of what is seen.
FLOOR = 5e-4


def compare(plans: Plans, name: str, points: int = POINTS) -> list[tuple[float, float, float]]:
    """(time scale, predicted, simulated) [% of peak] over the window, both ends included."""
    plan = plans.of(name)
    rows = []
    for time_scale in np.geomspace(*plan.sizing.window, points):
        board = exact_board(plan, float(time_scale))
        found, _ = predicted_error(plan.form.system, plan.patch, plan.ranges, plan.sensitivity, board, plan.target)
        rows.append((float(time_scale), found, checked(plan, board).max_error_percent))
    return rows


def main(names: list[str]) -> None:
    """Print one table a problem."""
    with tempfile.TemporaryDirectory() as folder:
        plans = Plans(Path(folder))
        for name in names or NAMES:
            rows = compare(plans, name)
            worst = max(max(p / s, s / p) for _, p, s in rows if max(p, s) > FLOOR)
            print(f"{name}: worst factor {worst:.3f}")
            for time_scale, predicted, simulated in rows:
                print(f"  {time_scale:10.3g} s  predicted {predicted:9.4f} %  simulated {simulated:9.4f} %")


if __name__ == "__main__":
    main(sys.argv[1:])
