"""Lamps over time."""

import numpy as np
import pytest
from pydantic import ValidationError

from hybridtrack.synthesis.lamp import LampRecipe

LAMPS = [
    LampRecipe(),
    LampRecipe(kind="flicker", rate_hz=100.0, depth=0.3, daylight=0.2, phase=0.3),
    LampRecipe(kind="pulsed", rate_hz=240.0, duty=0.3, edge_us=50.0, daylight=0.1, phase=0.7),
]


@pytest.mark.parametrize("lamp", LAMPS)
def test_integral_is_that_of_the_level(lamp: LampRecipe) -> None:
    """The closed-form integral agrees with a fine sum, forwards and backwards in time."""
    t = np.linspace(-3e6, 47e6, 500_001)
    level = lamp.level(t)
    total = np.concatenate([[0.0], np.cumsum(0.5 * (level[1:] + level[:-1]) * np.diff(t))])
    np.testing.assert_allclose(lamp.integral_ns(t) - lamp.integral_ns(t[:1]), total, atol=2.0)


@pytest.mark.parametrize("lamp", LAMPS)
def test_mean_level_is_one(lamp: LampRecipe) -> None:
    """Over whole cycles the mean is one: lamps do not change a scene's brightness."""
    span = 100 * 1e9 / lamp.rate_hz
    assert (lamp.integral_ns(np.array([span])) - lamp.integral_ns(np.zeros(1)))[0] / span == pytest.approx(1.0)


@pytest.mark.parametrize("lamp", LAMPS)
def test_level_is_nearly_straight_between_turning_points(lamp: LampRecipe) -> None:
    """Interpolating the level between its turning points is right to 1 % of the mean."""
    t0, t1 = 1.3e6, 31.7e6
    knots = np.union1d([t0, t1], lamp.turning_points_ns(t0, t1))
    t = np.linspace(t0, t1, 100_000)
    np.testing.assert_allclose(np.interp(t, knots, lamp.level(knots)), lamp.level(t), atol=0.01)


def test_flicker_depth_is_that_of_the_lamps() -> None:
    """A depth of 0.3 under no daylight swings from 0.7 to 1.3."""
    level = LampRecipe(kind="flicker", depth=0.3, daylight=0.0).level(np.linspace(0, 1e7, 1001))
    assert [level.min(), level.max()] == pytest.approx([0.7, 1.3])


def test_ramps_must_fit() -> None:
    """Ramps longer than a pulse are refused."""
    with pytest.raises(ValidationError, match="edge_us must be shorter"):
        LampRecipe(kind="pulsed", rate_hz=10_000.0, duty=0.05, edge_us=10.0)
