"""The subcircuits in an outside simulator against the formulas of the reference cases (formulas.json)."""

import cmath
import json
import math
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from patchplan.circuit.spice_models import multiplier_model, op_amp_model
from patchplan.sizing.records import MultiplierFigures, OpAmpFigures
from tests.circuit.spice import run_ngspice

FORMULAS = {
    f["id"]: f for f in json.loads((Path(__file__).parents[1] / "cases" / "formulas.json").read_text())["formulas"]
}
NEAR_IDEAL = {"gain": 1e9, "hertz": 1e9, "slew": 1e12}


def op_amp(gain: float = 2e5, hertz: float = 3e6, slew: float = 13e6, bias: float = 0.0) -> list[str]:
    return op_amp_model(OpAmpFigures("test", gain, 2 * math.pi * hertz, slew, -12.0, 12.0, 0.0, bias, 2e3))


def response(lines: list[str], hertz: float) -> complex:
    """v(out)/v(in) at one frequency."""
    text = ["* response", "V1 in 0 DC 0 AC 1", *lines, f".ac lin 1 {hertz:.9g} {hertz:.9g}", ".end", ""]
    nodes, _ = run_ngspice("\n".join(text))
    return complex(nodes["out"][0])


def run(lines: list[str], stop: float, step: float) -> tuple[dict[str, NDArray], NDArray]:
    text = [
        "* run",
        *lines,
        ".options method=trap reltol=1e-6",
        f".tran {step:.9g} {stop:.9g} 0 {step:.9g}",
        ".end",
        "",
    ]
    return run_ngspice("\n".join(text))


def integrator(ohm: float, farad: float, model: list[str]) -> list[str]:
    return [*model, f"R1 in inv {ohm}", f"C1 inv out {farad}", "X1 0 inv out opamp"]


@pytest.mark.parametrize("hertz", [1e3, 30e3, 3e6])
def test_open_loop_gain_is_one_pole(hertz):
    lines = [*op_amp(), "Einv minus 0 in 0 -1", "X1 0 minus out opamp"]
    assert response(lines, hertz) == pytest.approx(2e5 / (1 + 1j * hertz * 2e5 / 3e6), rel=1e-6)


@pytest.mark.parametrize("name", ["f=100 Hz", "f=1591.55 Hz", "f=10000 Hz", "f=100000 Hz"])
def test_integrator_with_finite_gain_and_bandwidth(name):
    example = FORMULAS["integrator_A0_and_GBW"]["example"]
    ohm, farad = example["R"], example["C"]
    # The case writes 1591.55 for 1/(2 pi R C).
    hertz = 1 / (2 * math.pi * ohm * farad) if "1591" in name else float(name[2:].split()[0])
    found = response(integrator(ohm, farad, op_amp(example["A0"], example["ft_Hz"])), hertz)
    ratio = found / (-1 / (2j * math.pi * hertz * ohm * farad))
    expected = example["response"][name]
    assert abs(ratio) == pytest.approx(expected["magnitude_ratio"], rel=1e-7)
    assert math.degrees(cmath.phase(ratio)) == pytest.approx(expected["excess_phase_deg"], rel=1e-4)


@pytest.mark.parametrize("decades", [0, 1, 2])
def test_lossy_integrator_above_its_corner(decades):
    example = FORMULAS["lossy_integrator"]["example"]
    farad, limit, ohm = example["C"], example["Rf"], 100e3
    hertz = 10**decades * example["fL_Hz"]
    lines = [*integrator(ohm, farad, op_amp(**NEAR_IDEAL)), f"R2 inv out {limit}"]
    ratio = response(lines, hertz) / (-1 / (2j * math.pi * hertz * ohm * farad))
    expected = example[f"at_{10**decades}_f"]
    assert abs(ratio) == pytest.approx(expected["magnitude_ratio_to_ideal"], rel=1e-6)
    assert math.degrees(cmath.phase(ratio)) == pytest.approx(expected["phase_error_deg (lead)"], rel=1e-5)


def test_summer_with_noise_gain():
    example = FORMULAS["summer_noise_gain"]["example"]
    inputs = [f"R{i} {'in' if i == 0 else 0} inv {ohm}" for i, ohm in enumerate(example["Ri"])]
    lines = [*op_amp(example["A0"], example["GBW_Hz"]), *inputs, f"R9 inv out {example['Rf']}", "X1 0 inv out opamp"]
    ratio = response(lines, 10e3) / (-example["Rf"] / example["Ri"][0])
    assert abs(ratio) == pytest.approx(example["at_10kHz"]["magnitude"], rel=1e-6)
    assert math.degrees(cmath.phase(ratio)) == pytest.approx(example["at_10kHz"]["phase_deg"], rel=1e-6)


def test_integrator_of_a_constant():
    example = FORMULAS["integrator_ideal"]["example"]
    lines = [*integrator(example["R"], example["C"], op_amp(**NEAR_IDEAL)), f"V1 in 0 DC {example['vi']}"]
    lines.append(".ic v(out)=0 v(inv)=0 v(x1.p)=0")
    nodes, _ = run(lines, example["t"], example["t"] / 100)
    assert nodes["out"][-1] == pytest.approx(example["vo"], rel=1e-5)


def test_full_power_bandwidth():
    example = FORMULAS["slew_full_power_bandwidth"]["example"]
    slew, peak, hertz = example["SR_V_per_s"], example["Vp_V"], example["f_Hz"]
    # A bandwidth far above the frequency leaves the slew rate as the only limit.
    model = op_amp(hertz=1000 * hertz, slew=slew)

    def swing(factor: float) -> float:
        period = 1 / (factor * hertz)
        lines = [*model, f"V1 in 0 SIN(0 {peak} {1 / period:.9g})", "X1 in out out opamp"]
        nodes, time = run(lines, 20 * period, period / 400)
        return float(np.ptp(nodes["out"][time > 19 * period])) / 2

    assert swing(0.9) == pytest.approx(peak, rel=2e-3)
    # Far above it the output is a triangle of slope SR: peak = SR/(4 f).
    assert swing(10) == pytest.approx(slew / (40 * hertz), rel=1e-2)


def test_output_stops_at_the_swing():
    nodes, _ = run(
        [*op_amp(), "V1 in 0 SIN(0 10 100)", "R1 in inv 10k", "R2 inv out 20k", "X1 0 inv out opamp"], 0.02, 2e-5
    )
    # The clamp gives way by slew/w_t.
    assert 12 < nodes["out"].max() < 12 + 13e6 / (2 * math.pi * 3e6) + 0.01


def test_bias_current_flows_into_the_inputs():
    # Formula summer_output_offset without Vos: Vo = Rf*Ib.
    example = FORMULAS["summer_output_offset"]["example"]
    lines = [*op_amp(gain=1e9, bias=example["Ib"]), f"R1 in inv {example['R']}", f"R2 inv out {example['Rf']}"]
    nodes, _ = run([*lines, "V1 in 0 DC 0", "X1 0 inv out opamp"], 1e-3, 1e-5)
    assert nodes["out"][-1] == pytest.approx(example["Rf"] * example["Ib"], rel=1e-6)


def multiplier(bandwidth: float = 1e6) -> list[str]:
    return multiplier_model(MultiplierFigures("test", 10.0, 10.0, 2 * math.pi * bandwidth, 20e6, 0.0, 0.0, 0.0))


@pytest.mark.parametrize(
    ("nets", "sign", "sum_volts"),
    [("x 0 y 0 0", 1, 0), ("0 x y 0 0", -1, 0), ("x 0 0 y 0", -1, 0), ("x 0 y 0 z", 1, 1.5)],
)
def test_product_of_the_multiplier(nets, sign, sum_volts):
    example = FORMULAS["multiplier_scale"]["example"]
    lines = [*multiplier(), f"Vx x 0 {example['X']}", f"Vy y 0 {example['Y']}", "Vz z 0 1.5", f"X1 {nets} out mult"]
    nodes, _ = run(lines, 1e-4, 1e-6)
    assert nodes["out"][-1] == pytest.approx(sign * example["W"] + sum_volts, rel=1e-6)


@pytest.mark.parametrize("hertz", [1e4, 1e6])
def test_bandwidth_of_the_multiplier(hertz):
    lines = [*multiplier(), "Vy y 0 DC 10", "X1 in 0 y 0 0 out mult"]
    assert response(lines, hertz) == pytest.approx(1 / (1 + 1j * hertz / 1e6), rel=1e-6)
