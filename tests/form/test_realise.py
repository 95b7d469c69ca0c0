"""Linear blocks in other states, against scipy.signal."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from scipy import linalg, signal

from patchplan.form.blocks import find_blocks
from patchplan.form.exact import roots
from patchplan.form.realise import AS_WRITTEN, FORMS, Realisation, realise
from patchplan.form.rewrite import rewrite, with_forms
from patchplan.form.sections import cascade
from tests.equation.simulated import built, simulate

W0 = 2 * np.pi * 500
#: Block in s, numerator and denominator for scipy.
BLOCKS = {
    # Poles of Butterworth's low-pass (1930), w0 exp(i pi (2 k + 5) / 12), multiplied out.
    "butterworth 6": (
        "w0^6/((s^2+2*cos(5*pi/12)*w0*s+w0^2)*(s^2+2*cos(3*pi/12)*w0*s+w0^2)*(s^2+2*cos(pi/12)*w0*s+w0^2))",
        signal.butter(6, W0, analog=True),
    ),
    "band-pass": (
        "(s/5)^2/((s^2 + s/5 + 1)*(s^2 + s/5 + 1.5))",
        ([0.04, 0, 0], np.polymul([1, 0.2, 1], [1, 0.2, 1.5])),
    ),
    "direct path": ("(s^3 + 2*s + 1)/((s + 1)*(s^2 + s + 4))", ([1, 0, 2, 1], np.polymul([1, 1], [1, 1, 4]))),
    "triple real pole": ("(s - 1)/((s + 1)*(s + 2)^3)", ([1, -1], np.poly([-1, -2, -2, -2]))),
    "triple pair": ("1/(s^2 + s + 2)^3", ([1], np.polymul([1, 1, 2], np.polymul([1, 1, 2], [1, 1, 2])))),
    "zero pairs on real poles": (
        "(s^2 + 4)^2/((s + 1)^3*(s + 3)*(s + 4))",
        (np.polymul([1, 0, 4], [1, 0, 4]), np.poly([-1, -1, -1, -3, -4])),
    ),
    "high-pass": ("s^5/((s + 1)*(s^2 + 0.6*s + 1)*(s^2 + 1.6*s + 1))",
                  ([1, 0, 0, 0, 0, 0], np.polymul([1, 1], np.polymul([1, 0.6, 1], [1, 1.6, 1])))),
    "integrator inside": ("(s + 3)/(s*(s + 1)*(s^2 + 2))", ([1, 3], np.polymul([1, 1, 0], [1, 0, 2]))),
    "unstable": ("2/((s - 1)*(s^2 + 3*s + 9))", ([2], np.polymul([1, -1], [1, 3, 9]))),
}  # fmt: skip
#: Forms that have no such poles or no such sums, and why.
REFUSED = {
    ("triple real pole", "two-integrator loops"): "No pair of poles is complex and damped",
    ("zero pairs on real poles", "two-integrator loops"): "No pair of poles is complex and damped",
    ("integrator inside", "two-integrator loops"): "No pair of poles is complex and damped",
    ("triple real pole", "parallel"): "too close together",
    ("triple pair", "parallel"): "too close together",
    ("zero pairs on real poles", "parallel"): "too close together",
    ("integrator inside", "ladder"): "not stable",
    ("integrator inside", "balanced"): "Only a stable block",
    ("unstable", "ladder"): "not stable",
    ("unstable", "balanced"): "Only a stable block",
}


def block_of(name):
    parameters = 'w0 = "2*pi*500"' if "w0" in BLOCKS[name][0] else ""
    system = built([f"y = {BLOCKS[name][0]} * u"], inputs='u = "cos(t)"', parameters=parameters)
    (block,) = find_blocks(system).blocks
    return system, block


def response(matrix, inlet, outlet, direct, w):
    """Frequency response, states scaled evenly first."""
    a, scales = linalg.matrix_balance(matrix, permute=False, separate=True)
    b, c = inlet / scales[0], outlet * scales[0]
    return np.array([c @ np.linalg.solve(1j * x * np.eye(len(a)) - a, b) + direct for x in w])


def floats(made: Realisation):
    matrix, inlet, over, share = made.open_rows()
    name = made.outlet.name
    return np.array(matrix, float), np.array(inlet, float), np.array(over[name], float), float(share[name])


@pytest.mark.parametrize("form", FORMS[1:])
@pytest.mark.parametrize("name", BLOCKS)
def test_every_form_has_the_transfer_function_written(name, form):
    """To 1e-9 of the peak over four decades, and the new states are T times the old ones."""
    _, block = block_of(name)
    made = realise(block, form)
    if (name, form) in REFUSED:
        assert isinstance(made, str)
        assert REFUSED[name, form] in made
        return
    assert isinstance(made, Realisation)
    numerator, denominator = BLOCKS[name][1]
    poles = np.abs(np.roots(denominator))
    w = np.geomspace(1e-2, 1e2, 81) * 1.01 * np.exp(np.log(poles[poles > 0]).mean())
    wanted = signal.freqs(numerator, denominator, w)[1]
    a, b, c, d = floats(made)
    assert np.abs(response(a, b, c, d, w) - wanted).max() < 1e-9 * np.abs(wanted).max()
    change, old = np.array(made.change, float), np.array(block.matrix, float)
    assert np.allclose(change @ np.array(block.inlet, float), b, rtol=1e-9, atol=1e-9 * np.abs(b).max())
    size = np.abs(change) @ np.abs(old)
    assert (np.abs(change @ old - a @ change) <= 1e-9 * size.max(axis=1, keepdims=True) + 1e-15 * size.max()).all()


@pytest.mark.parametrize("form", FORMS[1:])
def test_steps_agree_with_scipy(form):
    _, block = block_of("butterworth 6")
    made = realise(block, form)
    assert isinstance(made, Realisation)
    a, b, c, d = floats(made)
    a, scales = linalg.matrix_balance(a, permute=False, separate=True)
    times = np.linspace(0, 20 / W0, 60)
    found = signal.step((a, b[:, None] / scales[0][:, None], c[None] * scales[0], [[d]]), T=times)[1]
    wanted = signal.step(signal.butter(6, 1, analog=True), T=times * W0)[1]
    assert np.abs(found - wanted).max() < 1e-9


def test_roots_keep_their_multiplicity():
    found = roots(tuple(Fraction(c) for c in (0, 0, -16, -8, 8, 4, -1, Fraction(-1, 2))))
    # -s^2 (s^2 - 4)^2 (s + 2) / 2 has 0 twice, 2 twice, -2 three times.
    assert found == (0, 0, -2, -2, -2, 2, 2)


def test_sections_pair_poles_with_near_zeros_and_rise_in_q():
    """An elliptic low-pass: its highest Q is paired with its nearest notch (the rule of the handbooks)."""
    numerator, denominator = signal.ellip(6, 0.5, 40, 1, analog=True)
    exact = [tuple(Fraction(float(c)) for c in reversed(p)) for p in (numerator, denominator)]
    padded = (*exact[0], *(Fraction(0) for _ in range(len(exact[1]) - len(exact[0]))))
    sections = cascade(padded, exact[1])
    qualities = [s.quality for s in sections]
    assert qualities == sorted(qualities)
    notches = [float(s.numerator[0] / s.numerator[2]) ** 0.5 for s in sections]
    assert notches == sorted(notches, reverse=True)
    gain = np.prod([float(s.numerator[0] / s.denominator[0]) for s in sections])
    assert gain == pytest.approx(numerator[-1] / denominator[-1])


def test_real_poles_stay_alone_unless_a_pair_of_zeros_needs_them():
    assert [len(s.poles) for s in cascade(*polynomials([1], np.poly([-1, -2, -3])))] == [1, 1, 1]
    joined = cascade(*polynomials([1, 0, 4], np.poly([-1, -2, -3])))
    assert sorted(len(s.poles) for s in joined) == [1, 2]


def polynomials(numerator, denominator):
    numerator = [0] * (len(denominator) - len(numerator)) + list(numerator)
    return tuple(tuple(Fraction(float(c)) for c in reversed(p)) for p in (numerator, denominator))


CHAIN = "y''' = -2*y'' - 3*y' - 4*y + u"
START = 'y = 1\n"y\'" = 2\n"y\'\'" = -1'


def test_start_values_follow_and_needed_derivatives_are_states_or_sums():
    """A cascade ends in a two-integrator loop, whose other state is y'; y'' becomes a sum."""
    system = built([CHAIN, "p' = y'*y'' - p"], inputs='u = "cos(t)"', start=f"p = 0\n{START}")
    (block,) = find_blocks(system).blocks
    assert block.needed == ("y", "y'", "y''")
    made = with_forms(system, {"y": "cascade"})
    names = [s.name for s in made.system.states]
    assert {"y", "y'", "p"} < set(names)
    assert [r.name for r in made.system.signals] == ["y''"]
    starts = {s.name: s.start for s in made.system.states}
    assert (starts["y"], starts["y'"]) == pytest.approx((1, 2))
    (bend,) = made.system.signals
    assert float(sum(t.coefficient * starts[t.factors[0][0]] for t in bend.terms)) == pytest.approx(-1)


def test_a_derivative_taken_once_costs_no_stage():
    system = built([CHAIN, "p' = 3*y'' - p"], inputs='u = "cos(t)"', start=f"p = 0\n{START}")
    made = with_forms(system, {"y": "cascade"}).system
    assert made.signals == ()


def test_a_drive_of_many_terms_is_summed_once():
    one = "y = (s + 3)/((s + 1)*(s^2 + s + 4)) * (u - 2*v)"
    system = built([one], inputs='u = "cos(t)"\nv = "sin(t)"')
    assert next(r.name for r in with_forms(system, {"y": "parallel"}).system.signals) == "y.in"
    assert with_forms(built([CHAIN.replace("u", "u - 2*v")], inputs='u = "cos(t)"\nv = "sin(t)"', start=START),
                      {"y": "cascade"}).system.signals == ()  # fmt: skip


def test_a_knob_inside_keeps_the_form_as_written():
    system = built(["y''' = -c*y'' - 3*y' - 4*y + u"], inputs='u = "cos(t)"', start=START,
                   parameters="c = { from = 1, to = 3, value = 2 }")  # fmt: skip
    found = find_blocks(system)
    assert found.blocks == ()
    assert found.notes == ("y keeps the states of its equation, so that c stays one knob.",)


def test_a_knob_on_the_drive_keeps_its_one_stage():
    system = built([CHAIN.replace("u", "c*u")], inputs='u = "cos(t)"', start=START,
                   parameters="c = { from = 1, to = 3, value = 2 }")  # fmt: skip
    made = with_forms(system, {"y": "parallel"}).system
    assert [t.knobs for row in (*made.rows, *made.signals) for t in row.terms if t.knobs].count(("c",)) >= 1


def test_physical_states_and_short_blocks_are_no_blocks():
    motor = ["w' = (K*i - w)/2", "i' = (r - w - i)/3", "z' = r - w"]
    system = built(motor, inputs='r = "cos(t)"', start="w = 0\ni = 0\nz = 0", parameters="K = 2")
    assert find_blocks(system).blocks == ()
    assert find_blocks(built(["y'' = -y + u"], inputs='u = "cos(t)"', start='y = 1\n"y\'" = 0')).blocks == ()


def test_a_zero_on_a_pole_is_said():
    (block,) = find_blocks(built(["y = (s + 1)/((s + 1)*(s^2 + s + 4)) * u"], inputs='u = "cos(t)"')).blocks
    assert all("A zero lies on a pole" in str(realise(block, form)) for form in FORMS[1:])


def test_unknown_blocks_and_forms_are_refused():
    system = built([CHAIN], inputs='u = "cos(t)"', start=START)
    assert with_forms(system, {"y": AS_WRITTEN}) == rewrite(system, ())
    with pytest.raises(ValueError, match="x is the output of no linear block; there are y"):
        with_forms(system, {"x": "cascade"})


def test_an_input_s_derivative_leaves_a_block_too():
    """y''' + 3 y'' + 5 y' + 2 y = 2 u' + 3 u: a chain with a path in front of it."""
    equation = "y''' + 3*y'' + 5*y' + 2*y = 2*u' + 3*u"
    (block,) = find_blocks(built([equation], inputs='u = "sin(t)"', start=START)).blocks
    assert (block.numerator, block.denominator) == ((3, 2, 0, 0), (2, 5, 3, 1))


TWO = ["x''' = -2*x'' - 3*x' - 2*x + 0.5*y'' + u", "y''' = -y'' - 2*y' - y + 0.3*x' - 0.2*x^2*y' + 0.5*x''"]
STARTS = 'x = 0.4\n"x\'" = 0\n"x\'\'" = 0.1\ny = 0\n"y\'" = -0.5\n"y\'\'" = 0.2'


@pytest.mark.parametrize("forms", [("cascade", "ladder"), ("ladder", "balanced"), ("two-integrator loops", "parallel")])
def test_two_blocks_that_drive_each_other_move_as_before(forms):
    """Each takes derivatives of the other, one of them in a product; scipy solves both Systems."""
    system = built(TWO, inputs='u = "cos(t)"', start=STARTS, duration="3")
    made = with_forms(system, dict(zip("xy", forms, strict=True)))
    times = np.linspace(0, 3, 20)
    wanted, found, told = (simulate(s, times) for s in (system, made.system, made.extended))
    for name in ("x", "y"):
        assert np.allclose(found[name], wanted[name], atol=1e-6)
    for name in {s.name for s in made.system.states} - {s.name for s in system.states}:
        assert np.allclose(found[name], told[name], atol=1e-6 * max(1, np.abs(told[name]).max()))


@pytest.mark.parametrize("seed", range(25))
def test_drawn_blocks_keep_their_transfer_function(seed):
    """Third to eighth order, poles over a decade and a half, any number of zeros, with and without a direct path."""
    random = np.random.default_rng(seed)
    order = int(random.integers(3, 9))

    def drawn(count, damped):
        made = np.ones(1)
        while count:
            size = 10 ** random.uniform(-0.75, 0.75)
            if count == 1 or random.random() < 0.3:
                part = [1, size * (1 if damped else random.choice((-1, 1)))]
            else:
                part = [1, size * random.uniform(0.1 if damped else 0.0, 1.9), size**2]
            count -= len(part) - 1
            made = np.polymul(made, part)
        return made

    def text(polynomial):
        return "(" + " + ".join(f"{c}*s^{len(polynomial) - 1 - k}" for k, c in enumerate(polynomial.tolist())) + ")"

    denominator, numerator = drawn(order, damped=True), drawn(int(random.integers(0, order + 1)), damped=False)
    written = f"y = {text(numerator)}/{text(denominator)}*u".replace("+ -", "- ")
    (block,) = find_blocks(built([written], inputs='u = "cos(t)"')).blocks
    w = np.geomspace(1e-2, 1e2, 61)
    wanted = signal.freqs(numerator, denominator, w)[1]
    made = {form: realise(block, form) for form in FORMS[1:]}
    assert sum(isinstance(m, Realisation) for m in made.values()) >= 2
    for form, realisation in made.items():
        if isinstance(realisation, Realisation):
            found = response(*floats(realisation), w)
            assert np.abs(found - wanted).max() < 1e-9 * np.abs(wanted).max(), form
