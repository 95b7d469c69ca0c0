"""The predicted error against the full simulation of the same board."""

from __future__ import annotations

import pytest

from patchplan.compare.predict import predicted_error, predicted_spread
from tests.plans import Plans

#: Oscillators, products, a chaotic run, a free integrator with a DC-limit resistor, a loop of high gain.
NAMES = (
    "oscillator", "seat_suspension", "van_der_pol", "lorenz", "integrator", "motor_speed_loop", "duffing",
    "notch_w1_Q5_sine_at_notch", "sir_epidemic", "butterworth_4_step",
)  # fmt: skip
#: Below this [% of peak] the causes of an error cancel to what linear responses leave out.
FLOOR = 0.005


@pytest.mark.parametrize("name", NAMES)
def test_the_prediction_is_within_a_quarter_of_the_check(plans: Plans, name: str) -> None:
    plan = plans.of(name)
    system = plan.form.system
    found, causes = predicted_error(system, plan.patch, plan.ranges, plan.sensitivity, plan.sizing, plan.target)
    checked = plan.verdict.max_error_percent
    assert abs(found - checked) <= 0.25 * checked + FLOOR
    assert found <= sum(cause.error_percent for cause in causes) * (1 + 1e-12)
    spread, _ = predicted_spread(system, plan.patch, plan.sensitivity, plan.sizing, plan.target)
    assert spread == pytest.approx(plan.verdict.spread_percent, rel=1e-12)
