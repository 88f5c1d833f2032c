"""Metrics against known answers, honest statistics and refusals."""

import itertools

import numpy as np
import pytest
from scipy.spatial.transform import Rotation, Slerp

from hybridtrack.benchmark.metrics import (
    TruePaths,
    absolute_trajectory_error,
    align,
    bootstrap,
    field_positions,
    honesty,
    lens_displacement,
    map_displacement,
    moved_poses,
    nees,
    poses_at,
    relative_pose_error,
    survival,
)
from hybridtrack.errors import DegenerateDataError, OptionError, ShapeError
from hybridtrack.geometry import FisheyeLens, PerspectiveLens, se3, sim3, so3
from hybridtrack.module import Cluster, ColourArray, EventGrid, FrameMode, HybridModule
from hybridtrack.module.event_map import ColourFromEvent, nominal_matrix

Array = np.ndarray


def some_poses(count: int = 40, seed: int = 0) -> Array:
    rng = np.random.default_rng(seed)
    steps = np.concatenate([rng.normal(0.1, 0.05, (count, 3)), rng.normal(0.0, 0.05, (count, 3))], axis=1)
    poses = [np.eye(4)]
    for step in steps[1:]:
        poses.append(poses[-1] @ se3.exp(step))
    return np.array(poses)


def a_module(**changes: object) -> HybridModule:
    array, cluster = ColourArray(width=1280, height=800), Cluster(width=4, height=4, clear_site=(2, 2))
    grid, mode = EventGrid(width=320, height=200), FrameMode(width=640, height=400, binning=2)
    return HybridModule(colour_array=array, cluster=cluster, event_grid=grid, frame_mode=mode, **changes)  # type: ignore[arg-type]


def test_interpolated_poses_agree_with_scipy() -> None:
    """Between two samples the orientation turns evenly about one axis, as scipy's Slerp does; outside it is NaN."""
    poses = some_poses(6)
    t_ns = np.array([0, 10, 25, 30, 47, 60]) * 1_000_000
    at_ns = np.linspace(0, 60_000_000, 13).astype(np.int64)
    slerp = Slerp(t_ns, Rotation.from_matrix(poses[:, :3, :3]))(at_ns).as_matrix()
    np.testing.assert_allclose(poses_at(t_ns, poses, at_ns)[:, :3, :3], slerp, atol=1e-12)
    assert np.isnan(poses_at(t_ns, poses, np.array([-1, 60_000_001]))).all()


def test_interpolation_refuses_times_that_do_not_rise() -> None:
    """Repeated stamps are refused."""
    with pytest.raises(ShapeError, match="rising times"):
        poses_at(np.array([0, 0]), some_poses(2), np.array([0]))


def test_a_similarity_leaves_no_absolute_error() -> None:
    """Poses that differ from truth by a similarity have no error after alignment, and its scale is found."""
    truth = some_poses()
    moved = moved_poses(sim3.compose(0.4, so3.exp([0.3, -0.2, 1.0]), [1.0, 2.0, 3.0]), truth)
    error = absolute_trajectory_error(moved, truth)
    assert error.rms_m < 1e-12
    assert error.turn_rms_deg < 1e-9
    np.testing.assert_allclose(np.abs(error.errors).max(), 0.0, atol=1e-12)
    np.testing.assert_allclose(sim3.decompose(error.similarity)[0], 2.5)


def test_absolute_error_of_a_known_shift() -> None:
    """Without alignment a shift by 3 and 4 cm is an error of 5 cm in every measure, and a share of the true path."""
    truth = some_poses()
    shifted = truth.copy()
    shifted[:, :3, 3] += [0.03, 0.04, 0.0]
    error = absolute_trajectory_error(shifted, truth, "none")
    np.testing.assert_allclose([error.rms_m, error.median_m, error.max_m], 0.05)
    path = np.linalg.norm(np.diff(truth[:, :3, 3], axis=0), axis=1).sum()
    np.testing.assert_allclose(error.percent, 5.0 / path)


def test_rigid_alignment_keeps_the_scale() -> None:
    """A trajectory half as large keeps an error under rigid alignment and none under a similarity."""
    truth = some_poses()
    small = moved_poses(sim3.compose(0.5, np.eye(3), np.zeros(3)), truth)
    assert absolute_trajectory_error(small, truth, "rigid").rms_m > 0.1
    assert absolute_trajectory_error(small, truth, "similarity").rms_m < 1e-12


def test_alignment_refuses_a_line_and_an_unknown_word() -> None:
    """Positions on one line leave the roll about it open; a word that names no alignment is refused."""
    line = np.tile(np.eye(4), (5, 1, 1))
    line[:, 0, 3] = np.arange(5)
    with pytest.raises(DegenerateDataError, match="on one line"):
        absolute_trajectory_error(line, line)
    with pytest.raises(OptionError, match="alignment"):
        align(line, line, "affine")  # type: ignore[arg-type]


def test_relative_error_of_a_known_drift() -> None:
    """A drift of 1 mm and 0.1 degrees a step is what the error over one step says, whatever the frame of reference."""
    truth = some_poses()
    drift = se3.exp([0.001, 0.0, 0.0, 0.0, 0.0, np.deg2rad(0.1)])
    estimate = [se3.exp([1.0, 2.0, 3.0, 0.4, 0.5, 0.6])]
    for a, b in itertools.pairwise(truth):
        estimate.append(estimate[-1] @ se3.inverse(a) @ b @ drift)
    error = relative_pose_error(np.array(estimate), truth, 1)
    np.testing.assert_allclose(error.turn_rms_deg, 0.1, rtol=1e-9)
    np.testing.assert_allclose(error.shift_rms_m, np.linalg.norm(drift[:3, 3]), rtol=1e-9)
    assert error.pairs == len(truth) - 1


def test_relative_error_leaves_lost_poses_out() -> None:
    """A lost pose takes its pairs with it; where nothing is left the metric refuses."""
    truth = some_poses(5)
    estimate = truth.copy()
    estimate[2] = np.nan
    assert relative_pose_error(estimate, truth, 1).pairs == 2
    estimate[1:4] = np.nan
    with pytest.raises(DegenerateDataError, match="expected a pair of poses 1 apart"):
        relative_pose_error(estimate, truth, 1)
    with pytest.raises(OptionError, match="step"):
        relative_pose_error(truth, truth, 0)


def test_relative_error_knows_the_scale() -> None:
    """Lengths of a trajectory in another unit are brought to metres by `scale`."""
    truth = some_poses()
    small = moved_poses(sim3.compose(0.5, np.eye(3), np.zeros(3)), truth)
    assert relative_pose_error(small, truth, 3, scale=2.0).shift_rms_m < 1e-12
    assert relative_pose_error(small, truth, 3).shift_rms_m > 0.05


def test_nees_of_draws_from_the_stated_covariance_is_honest() -> None:
    """Errors drawn from their covariances average one and 95 % lie inside; halving the deviations shows at once."""
    rng = np.random.default_rng(3)
    root = rng.normal(size=(4000, 6, 6)) + 3.0 * np.eye(6)
    errors = (root @ rng.normal(size=(4000, 6, 1)))[..., 0]
    right = honesty(nees(errors, root @ np.swapaxes(root, 1, 2)), 6)
    assert abs(right.mean_ratio - 1.0) < 0.05
    assert abs(right.coverage - 0.95) < 0.015
    boasting = honesty(nees(errors, 0.25 * root @ np.swapaxes(root, 1, 2)), 6)
    np.testing.assert_allclose(boasting.mean_ratio, 4.0 * right.mean_ratio)


def test_nees_refuses_shapes_that_do_not_match() -> None:
    """Covariances of another size than the errors are refused, and so is judging nothing."""
    with pytest.raises(ShapeError, match="covariances"):
        nees(np.zeros((3, 2)), np.zeros((3, 3, 3)))
    with pytest.raises(DegenerateDataError, match="at least one NEES"):
        honesty(np.empty(0), 6)


def test_map_displacement_of_a_shifted_map() -> None:
    """A map shifted by 0.1 and -0.2 colour px is displaced by just that over the whole 5x4 field."""
    truth = a_module()
    matrix = nominal_matrix(truth.cluster, truth.event_grid) + np.array([[0, 0, 0.1], [0, 0, -0.2]])
    shifted = a_module(colour_from_event=ColourFromEvent(matrix=matrix.tolist()))
    displacement = map_displacement(shifted, truth)
    assert displacement.shape == (20, 2)
    np.testing.assert_allclose(displacement, np.tile([0.1, -0.2], (20, 1)), atol=1e-12)


def test_lens_displacement_does_not_see_orientation() -> None:
    """A lens whose principal point moved by 2 px looks almost like a turned camera; a focal error of 1 % remains."""
    truth = PerspectiveLens(900.0, 900.0, 640.0, 400.0)
    turned = PerspectiveLens(900.0, 900.0, 642.0, 400.0)
    plain = np.linalg.norm(
        turned.project(truth.unproject(field_positions(1280, 800))) - field_positions(1280, 800), axis=1
    )
    left = np.linalg.norm(lens_displacement(turned, truth, 1280, 800), axis=1)
    np.testing.assert_allclose(plain, 2.0)
    assert left.max() < 0.7
    zoomed = PerspectiveLens(909.0, 909.0, 640.0, 400.0)
    away = np.linalg.norm(field_positions(1280, 800) - [639.5, 399.5], axis=1)
    np.testing.assert_allclose(
        np.linalg.norm(lens_displacement(zoomed, truth, 1280, 800), axis=1), 0.01 * away, atol=0.02
    )


def test_the_same_lens_is_not_displaced() -> None:
    """Every lens model agrees with itself."""
    for lens in (
        PerspectiveLens(900.0, 905.0, 640.0, 395.0, (-0.1, 0.02, 0.0)),
        FisheyeLens(500.0, 500.0, 640.0, 400.0),
    ):
        assert np.abs(lens_displacement(lens, lens, 1280, 800)).max() < 1e-8


def truth_paths() -> TruePaths:
    t_ns = np.arange(0, 101, 10) * 1_000_000
    uv = np.stack([np.stack([100.0 + t_ns * 1e-6, 50.0 + 0 * t_ns], axis=1) + 100 * s for s in range(4)], axis=1)
    visible = np.ones((len(t_ns), 4), bool)
    visible[-1, 3] = False
    return TruePaths(np.array([7, 8, 9, 10]), t_ns, uv, visible)


def test_survival_counts_what_the_definition_says() -> None:
    """One of three seeds survives: one drifts to 6 px, one is lost; a fourth leaves the picture and is no seed."""
    truth = truth_paths()
    ids = np.tile(truth.ids, len(truth.t_ns))
    t_ns = np.repeat(truth.t_ns, 4)
    uv = truth.uv.reshape(-1, 2).copy()
    uv[(ids == 8) & (t_ns == 50_000_000), 1] += 6.0
    lost = (ids == 9) & (t_ns == 100_000_000)
    score = survival(ids, t_ns, uv, lost, truth)
    assert (score.survived, score.seeds) == (1, 3)
    np.testing.assert_allclose(score.share, 1 / 3)


def test_a_track_that_ends_early_or_is_missing_does_not_survive() -> None:
    """A track must be there from the first instant to the last."""
    truth = truth_paths()
    ids = np.repeat(truth.ids[:2], len(truth.t_ns))
    t_ns, uv = np.tile(truth.t_ns, 2), np.concatenate([truth.uv[:, 0], truth.uv[:, 1]])
    short = ~((ids == 8) & (t_ns > 60_000_000))
    score = survival(ids[short], t_ns[short], uv[short], np.zeros(short.sum(), bool), truth)
    assert (score.survived, score.seeds) == (1, 3)


def test_survival_without_seeds_is_nan() -> None:
    """Where no seed stays visible there is no share."""
    truth = truth_paths()
    empty = TruePaths(truth.ids, truth.t_ns, truth.uv, np.zeros_like(truth.visible))
    none = np.empty(0)
    assert np.isnan(survival(none, none, np.empty((0, 2)), none.astype(bool), empty).share)


def test_bootstrap_interval_is_that_of_the_mean() -> None:
    """For a mean of 400 normal draws the interval is about 1.96 deviations to each side, and covers the truth."""
    values = np.random.default_rng(5).normal(3.0, 2.0, 400)
    interval = bootstrap(values)
    np.testing.assert_allclose(interval.high - interval.low, 2 * 1.96 * 2.0 / 20.0, rtol=0.12)
    assert interval.low < 3.0 < interval.high
    with pytest.raises(DegenerateDataError, match="at least 2 values"):
        bootstrap(values[:1])


def test_intervals_cover_as_often_as_they_say() -> None:
    """Over 300 samples of 60 draws the 95 % interval holds the true mean in 91 to 98 %."""
    rng = np.random.default_rng(11)
    inside = 0
    for number in range(300):
        interval = bootstrap(rng.exponential(1.0, 60), rounds=200, seed=number)
        inside += interval.low <= 1.0 <= interval.high
    assert 0.90 <= inside / 300 <= 0.98
