"""Whether the event map depends on how far the board stood."""

from dataclasses import replace

import numpy as np
import pytest
from board_renderer import Pixels, random_pose, render_view
from rendered_boards import LENS, SMALL, board, shuttered_set

from hybridtrack.calibration.event_map_fit import fit_event_map
from hybridtrack.calibration.parallax import ViewPulls, judge_parallax
from hybridtrack.calibration.view_data import LensFit


def two_lens_views(parallax_px_m):
    """Views between 0.25 and 0.6 m whose event pixels look from beside the frame's lens: shifted by so much / Z."""
    from board_renderer import Scene

    scene, rng = Scene(board(), LENS), np.random.default_rng(8)
    pixels = Pixels.draw(rng, scene, SMALL.event_positions().shape[:2])
    views, poses = [], []
    for k, fill in enumerate((0.9, 0.8, 0.7, 0.6, 0.5, 0.45)):
        pose = random_pose(rng, scene.lens, scene.target, 20.0, fill, 0.05)
        depth_m = pose[2, 3]
        shifted = replace(SMALL, centroid=(SMALL.centroid[0] + parallax_px_m / depth_m, SMALL.centroid[1]))
        views.append(render_view(rng, scene, shifted, pixels, pose, k))
        poses.append(pose)
    nothing, count = np.zeros((0, 2)), len(poses)
    truth = LensFit(scene.lens, np.arange(count), np.array(poses), nothing, np.zeros(0), nothing, (), np.zeros((0, 0)),
                    1.0, joint_covariance=np.zeros((6 * count, 6 * count)))  # fmt: skip
    return views, truth, scene.target, SMALL.module()


def test_two_lenses_are_told_from_one():
    """A shift of 0.05 px m over distance is found with its size and named; the same views without it are not."""
    views, *rest = two_lens_views(0.05)
    found = fit_event_map(views, [], *rest).parallax
    wanted_px = 0.05 * (1.0 / found.nearest_m - 1.0 / found.farthest_m)
    assert found.p_value < 1e-3
    assert found.moved_px[0] == pytest.approx(wanted_px, abs=4 * found.sigma_px[0])
    assert any("the module has parallax" in sentence for sentence in found.findings())
    views, *rest = two_lens_views(0.0)
    alone = fit_event_map(views, [], *rest).parallax
    assert alone.p_value > 1e-3
    assert not alone.findings()


def noise_alone(rng, views):
    """Pulls of views that scatter as their spread says."""
    eye, scores = np.tile(400.0 * np.eye(7), (views, 1, 1)), 20.0 * rng.normal(size=(views, 7))
    scores -= scores.mean(0)
    chi_square = float(np.sum(scores**2) / 400.0)
    return ViewPulls(scores, eye, eye, np.zeros((views, 7, 1)), np.eye(1), chi_square, 7 * (views - 1))


def test_boards_at_one_distance_say_that_nothing_was_tested():
    """And which view to add."""
    rng = np.random.default_rng(0)
    verdict = judge_parallax(noise_alone(rng, 5), np.full(5, 0.6))
    assert verdict.p_value is None
    assert "add a view at half or twice the distance" in verdict.findings()[0]


def test_false_alarms_are_as_rare_as_stated():
    """Pulls of pure noise: p-values are nearly uniform."""
    rng, depth_m = np.random.default_rng(1), np.linspace(0.3, 0.8, 8)
    values = [judge_parallax(noise_alone(rng, 8), depth_m).p_value for _ in range(600)]
    # The factor is never under one, so that alarms are fewer than the level rather than more.
    assert 0.01 < np.mean(np.array(values) < 0.05) < 0.07
    assert 0.4 < np.mean(values) < 0.65


def test_the_shared_scenes_have_no_parallax():
    """One lens over one sensor, from the poses and deviations of a fit."""
    rendered = shuttered_set()
    fit = fit_event_map(rendered.views, [], rendered.true_fit(), rendered.scene.target, rendered.layout.module())
    assert fit.parallax is not None
    assert fit.parallax.p_value is None or fit.parallax.p_value > 1e-3
