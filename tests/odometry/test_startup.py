"""The first map: found in depth and in a plane, refused where two views can't give one."""

from collections.abc import Callable

import numpy as np
import pytest

from hybridtrack.geometry import se3, similarity
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.startup import Start, start_map

OPTIONS = OdometryOptions()


def check_against_truth(start: Start, lap: object, tolerance: float) -> None:
    """Points agree with truth after alignment: median error as a share of the distance to the camera."""
    assert start.world is not None, start.reason
    ids = {point: track for k in start.world.keyframes for track, point in zip(k.view.ids, k.points, strict=True)}
    points = np.flatnonzero(start.world.alive)
    true = lap.points[[lap.point_of_track[int(ids[p])] for p in points]]  # type: ignore[attr-defined]
    estimate = start.world.positions[points]
    moved = se3.affine_transform(similarity(estimate, true), estimate)
    assert np.median(np.linalg.norm(moved - true, axis=1)) < tolerance * 1.2


@pytest.mark.parametrize("planar", [False, True])
def test_exact_without_noise(make_lap: Callable, planar: bool) -> None:
    """Under a global shutter and without noise the first map is the world, in depth and in a plane."""
    lap = make_lap(planar=planar, row_time_s=0.0)
    check_against_truth(start_map(lap.views(0.3)[20:33], 0, OPTIONS), lap, 1e-6)


@pytest.mark.parametrize("planar", [False, True])
def test_good_with_noise_outliers_and_rolling_shutter(make_lap: Callable, planar: bool) -> None:
    """With 0.3 px of noise, drifting tracks and rows at their own times, points are right to 1 % of their distance."""
    lap = make_lap(planar=planar, noise_px=0.3, drifting_share=0.1)
    check_against_truth(start_map(lap.views(0.3)[20:33], 0, OPTIONS), lap, 0.01)


def test_scale_is_the_median_depth_asked_for(make_lap: Callable) -> None:
    """The first view sees the first map at the median depth of `start_depth`."""
    start = start_map(make_lap(noise_px=0.3).views(0.3)[20:33], 0, OdometryOptions(start_depth=2.5))
    assert start.world is not None
    np.testing.assert_allclose(np.median(start.world.positions[start.world.alive][:, 2]), 2.5, rtol=1e-9)


def test_a_turning_camera_is_refused(make_lap: Callable) -> None:
    """A picture that moves by rotation alone holds no depth, and the reason says so."""
    start = start_map(make_lap(path="turn", noise_px=0.3).views(0.3)[:15], 0, OPTIONS)
    assert start.world is None
    assert "a rotation alone explains" in start.reason


def test_too_little_parallax_is_refused(make_lap: Callable) -> None:
    """With a gate above what the views hold the map is not made, and both angles are named."""
    start = start_map(make_lap(noise_px=0.3).views(0.3)[20:30], 0, OdometryOptions(start_parallax_deg=30.0))
    assert start.world is None
    assert "at least 30.0 are needed" in start.reason


def test_too_few_tracks_are_refused(make_lap: Callable) -> None:
    """With fewer shared tracks than needed the number is named."""
    views = [view.select(np.arange(20)) for view in make_lap(noise_px=0.3).views(0.3)[20:30]]
    start = start_map(views, 0, OPTIONS)
    assert start.world is None
    assert "at least 30 are needed" in start.reason


def test_tracks_that_agree_on_nothing_are_refused(make_lap: Callable) -> None:
    """Tracks that wander at random make no map."""
    lap = make_lap(noise_px=40.0)
    start = start_map(lap.views(0.3)[20:30], 0, OPTIONS)
    assert start.world is None
    assert start.reason
