"""The curve of counts against steps, and the noise about it."""

import numpy as np
import pytest

from hybridtrack.calibration.count_curve import CountCurve, fit_noise, smoothness, straight_curve

CURVE = CountCurve(np.array([0.5, 1.0, 2.0]), np.array([0.0, 1.0, 5.0]))


def test_curve_is_odd_and_linear_between_knots():
    """Zero at zero, straight between knots, and on beyond the last."""
    np.testing.assert_allclose(CURVE.value(np.array([0.0, 0.25, 0.75, 1.5, 2.5])), [0.0, 0.0, 0.5, 3.0, 7.0])
    steps = np.linspace(-2.5, 2.5, 41)
    np.testing.assert_allclose(CURVE.value(-steps), -CURVE.value(steps))
    np.testing.assert_allclose(CURVE.design(steps) @ CURVE.heights, CURVE.value(steps))


def test_slope_away_from_knots_is_the_segments():
    """Four counts a unit of step between one and two."""
    assert CURVE.slope(np.array([1.5]))[0] == pytest.approx(4.0)
    assert CURVE.slope(np.array([-1.5]))[0] == pytest.approx(4.0)


def test_first_curve_follows_the_strong_steps():
    """Proportional, with the ratio that strong steps show, hot pixels notwithstanding."""
    rng = np.random.default_rng(0)
    steps = rng.uniform(-2.0, 2.0, 4000)
    counts = 5.0 * steps + rng.normal(size=4000) * 0.1
    counts[:40] += 50.0
    curve = straight_curve(steps, counts)
    assert curve.value(np.array([1.0]))[0] == pytest.approx(5.0, rel=0.01)


def test_a_straight_curve_has_no_bend():
    """Second differences vanish but for the open end."""
    curve = straight_curve(np.linspace(-2, 2, 100), np.linspace(-8, 8, 100))
    np.testing.assert_allclose(smoothness(curve)[:-1] @ curve.heights, 0.0, atol=1e-12)


def test_noise_terms_are_recovered_through_gross_errors():
    """Floor and position terms to 15 % with 1 % of the residuals wild."""
    rng = np.random.default_rng(1)
    count, slope = rng.uniform(0, 10, 40000), np.where(rng.random(40000) < 0.3, rng.uniform(1, 6, 40000), 0.0)
    variance = 0.05 + 0.01 * slope**2
    residual = rng.normal(size=40000) * np.sqrt(variance)
    residual[:400] += 20.0
    noise = fit_noise(residual, count, slope)
    assert noise.floor == pytest.approx(0.05, rel=0.15)
    assert noise.position == pytest.approx(0.01, rel=0.15)
    assert noise.variance(np.array([0.0]), np.array([2.0]))[0] == pytest.approx(0.09, rel=0.15)
