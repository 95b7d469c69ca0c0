"""Extremes, resampling and grids against curves known in closed form."""

from __future__ import annotations

import numpy as np

from patchplan.reach.curves import Curves, extremes, linear_error, refined, resample


def sine(points):
    t = np.linspace(0.0, 10.0, points)
    return t, np.array([np.sin(3 * t), 2 + 0.5 * np.cos(t)]), np.array([3 * np.cos(3 * t), -0.5 * np.sin(t)])


def test_extremes_between_samples():
    t = np.array([0.0, 0.4, 0.8, 1.2, 1.6])
    low, high = extremes(
        t, np.array([np.sin(3 * t), 1 - np.sin(3 * t)]), np.array([3 * np.cos(3 * t), -3 * np.cos(3 * t)])
    )
    assert np.sin(3 * t).max() < 0.94
    # A cubic between samples errs by (w h)^4 / 384 of the amplitude.
    np.testing.assert_allclose(high, [1.0, 2.0], atol=1.2**4 / 384)
    np.testing.assert_allclose(low, [-1.0, 0.0], atol=1.2**4 / 384)


def test_extremes_of_one_curve_are_numbers():
    t, values, rates = sine(101)
    low, high = extremes(t, values[0], rates[0])
    assert low.shape == ()
    assert high.shape == ()
    np.testing.assert_allclose([low, high], [-1.0, 1.0], atol=1e-4)


def test_resampling_keeps_a_jump():
    t = np.array([0.0, 1.0, 1.0, 2.0])
    values, rates = np.array([[0.0, 1.0, 5.0, 5.0]]), np.array([[1.0, 1.0, 0.0, 0.0]])
    np.testing.assert_allclose(
        resample(t, values, rates, np.array([0.5, 1 - 1e-12, 1.0, 1.5, 2.0]))[0], [0.5, 1, 5, 5, 5]
    )
    curves = Curves(t, values, rates)
    assert curves.jumps.tolist() == [1.0]
    rise, bend, after = curves.jump(1.0)
    assert (rise[0], bend[0], after[0]) == (4.0, -1.0, 5.0)


def test_refined_grid_meets_its_aim():
    t, values, rates = sine(101)
    grid = refined(t, linear_error(t, values, rates), most=20000)
    fine = np.linspace(0, 10, 50001)
    assert np.abs(np.interp(fine, grid, np.sin(3 * grid)) - np.sin(3 * fine)).max() < 1e-4
    assert len(grid) < 2000
    assert np.isin(t, grid).all()


def test_a_curve_too_small_for_squares_turns_nowhere():
    """Squares of 1e-200 vanish; the turning point once came out as 0/0."""
    times = np.array([0.0, 1.0])
    low, high = extremes(times, np.array([[0.0, 0.0]]), np.array([[1e-200, -2e-200]]))
    assert np.abs([low, high]).max() <= 1e-199
