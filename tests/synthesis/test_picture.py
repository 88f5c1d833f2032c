"""Ideal pictures and true tracks."""

import numpy as np
import pytest

from hybridtrack.synthesis.lamp import LampRecipe
from hybridtrack.synthesis.picture import points_seen, sharp_pictures, truth_tracks, visible_points
from hybridtrack.synthesis.scene import SceneBuilder, Surface
from hybridtrack.synthesis.view import Optics, View
from tests.synthesis.panels import DISTANCE_M, FOCAL_PX, lens_of, seeing_module, sliding, step_panel

OPTICS = Optics(0.4, 0.0)


def wall_and_post() -> "SceneBuilder":
    """A wall at z = 0 and a post 20 px wide half-way to the camera, right of the axis."""
    builder = SceneBuilder()
    texture = builder.texture(np.full((4, 4), 0.5))
    builder.add(Surface((-5.0, -5.0, 0.0), (10.0, 0, 0), (0, 10.0, 0), texture))
    px = 0.5 * DISTANCE_M / FOCAL_PX
    builder.add(Surface((10 * px, -5.0, -0.5 * DISTANCE_M), (20 * px, 0, 0), (0, 10.0, 0), texture))
    return builder


def test_tracks_start_at_their_seeds_and_move_with_the_picture() -> None:
    """A seed is where it was seeded at its own time, and moves on at the picture's speed."""
    module, trajectory = seeing_module(), sliding(400.0)
    random = np.random.default_rng(0)
    uv, t0 = random.uniform([20, 10], [120, 85], (30, 2)), random.uniform(0, 2e7, 30)
    times = np.array([0.0, 1e7, 3e7])
    tracks, visible = truth_tracks(step_panel(), module, trajectory, uv, t0, times)
    np.testing.assert_allclose(tracks[..., 0], uv[:, 0] + 400.0 * 1e-9 * (times[:, None] - t0), atol=1e-9)
    np.testing.assert_allclose(tracks[..., 1], np.broadcast_to(uv[:, 1], (3, 30)), atol=1e-9)
    assert visible.all()


def test_points_behind_something_are_not_seen() -> None:
    """A wall point passing behind a post is hidden exactly while it is behind, though it still has a place."""
    scene, module, trajectory = wall_and_post().build(), seeing_module(), sliding(400.0)
    times = np.arange(0.0, 9e7, 2e6)
    tracks, _ = truth_tracks(scene, module, trajectory, np.array([[79.5, 40.0]]), 0.0, times)
    # The post is half as far: it moves twice as fast and gets 10 to 30 px ahead of where the point started.
    place, post = tracks[:, 0, 0], 79.5 + 2 * 400.0 * times * 1e-9
    hidden = (place > post + 10.0) & (place < post + 30.0)
    assert not hidden.any()
    back, seen = truth_tracks(scene, module, trajectory, np.array([[119.5, 40.0]]), 0.0, times)
    ahead = back[:, 0, 0] - post
    assert np.array_equal(seen[:, 0], ~((ahead > 10.0) & (ahead < 30.0)))
    assert 0 < (~seen).sum() < len(times)
    assert np.isfinite(back).all()


def test_points_off_the_array_are_not_seen() -> None:
    """A point that leaves the picture is not seen, and one behind the camera has no place."""
    module, trajectory = seeing_module(), sliding(400.0)
    tracks, visible = truth_tracks(step_panel(), module, trajectory, np.array([[150.0, 40.0]]), 0.0, [0.0, 1e7, 5e7])
    assert visible[:, 0].tolist() == [True, True, False]
    assert tracks[2, 0, 0] == pytest.approx(170.0)
    uv, seen = visible_points(step_panel(), module, trajectory, np.array([[0.0, 0.0, -9.0]]), np.array([0.0]))
    assert np.isnan(uv).all()
    assert not seen.any()


def test_seeds_that_meet_nothing_have_no_track() -> None:
    """A seed beside the panel is NaN and never seen."""
    builder = SceneBuilder()
    builder.add(Surface((0.0, -5.0, 0.0), (5.0, 0, 0), (0, 10.0, 0), builder.texture(np.ones((4, 4)))))
    scene, module = builder.build(), seeing_module()
    seeds = np.array([[20.0, 40.0], [120.0, 40.0]])
    points, surface = points_seen(scene, lens_of(module), sliding(0.0), seeds, np.zeros(2))
    assert surface.tolist() == [-1, 0]
    assert np.isnan(points[0]).all()
    tracks, visible = truth_tracks(scene, module, sliding(0.0), np.array([[20.0, 40.0]]), 0.0, [0.0])
    assert np.isnan(tracks).all()
    assert not visible.any()


def test_sharp_pictures_have_neither_blur_nor_flicker() -> None:
    """At speed and under deep flicker the edge stays as sharp and as bright as at rest, where truth puts it."""
    lamp = LampRecipe(kind="flicker", depth=0.9, daylight=0.0, white_dn=200.0)
    module = seeing_module(binning=1)
    still = next(sharp_pictures(View(step_panel(), module, sliding(0.0), lamp, OPTICS), [0.0]))
    fast = View(step_panel(), module, sliding(5000.0), lamp, OPTICS)
    first, later = sharp_pictures(fast, [0.0, 2e6])
    assert first.dtype == np.uint8
    assert np.array_equal(first, still)
    assert np.array_equal(later[:, 10:150], still[:, :140])
