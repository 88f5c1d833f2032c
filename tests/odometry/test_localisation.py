"""Pose of one frame: exact, honest, robust, and refused where the rays do not determine it."""

from collections.abc import Callable

import numpy as np
import pytest

from hybridtrack.geometry import se3
from hybridtrack.odometry import kernels
from hybridtrack.odometry.localisation import Approach, localise, refine_pose, search_pose
from hybridtrack.odometry.motion import camera_from_frame
from hybridtrack.odometry.observations import View
from hybridtrack.odometry.options import OdometryOptions

Array = np.ndarray
OPTIONS = OdometryOptions()


def seen(lap: object, frame: int) -> tuple[View, Array, Array]:
    """A frame's view, the true points of its rays, and the true pose."""
    view = lap.views(0.3)[frame]  # type: ignore[attr-defined]
    return view, lap.points_of(view), lap.world_from_camera[frame]  # type: ignore[attr-defined]


def off_by(estimate: Array, truth: Array) -> float:
    return float(np.abs(se3.log(se3.inverse(estimate) @ truth)).max())


def test_kernel_gradient_agrees_with_differences(make_lap: Callable) -> None:
    """J'r of the compiled pose equations equals half the difference quotient of the sum of squares."""
    view, points, truth = seen(make_lap(), 30)
    pose = truth @ se3.exp([0.002, -0.001, 0.003, 0.001, 0.002, -0.001])
    motion = camera_from_frame(np.array([0.5, 0.1, 0.0, 0.1, 0.0, 0.2]), view.dt_s)
    turns, shifts = np.ascontiguousarray(motion[:, :3, :3]), np.ascontiguousarray(motion[:, :3, 3])

    def fill(at: Array) -> tuple[Array, float]:
        H, g, norms = np.empty((6, 6)), np.empty(6), np.zeros(len(view))
        kernels.pose_equations(
            np.ascontiguousarray(at[:3, :3]),
            at[:3, 3].copy(),
            points,
            turns,
            shifts,
            view.rays,
            view.whitening,
            np.ones(len(view)),
            0.0,
            H,
            g,
            norms,
        )
        return g, 0.5 * float(np.sum(norms**2))

    gradient, _ = fill(pose)
    for i in range(6):
        step = 1e-7 * np.eye(6)[i]
        slope = (fill(pose @ se3.exp(step))[1] - fill(pose @ se3.exp(-step))[1]) / 2e-7
        np.testing.assert_allclose(gradient[i], slope, rtol=1e-4, atol=1.0)


def test_exact_at_the_rays_own_times(make_lap: Callable) -> None:
    """Under a rolling shutter of 16 ms a pose with the true twist is right to what acceleration leaves (2 m/s^2 in 8 ms
    is 64 um); without the twist it is ten times as far off."""
    lap = make_lap(row_time_s=20e-6)
    view, points, truth = seen(lap, 30)
    twist = se3.log(se3.inverse(lap.world_from_camera[29]) @ lap.world_from_camera[31]) / (2 / 60)
    with_twist = refine_pose(view, points, truth, twist)
    without = refine_pose(view, points, truth, np.zeros(6))
    assert with_twist is not None
    assert without is not None
    assert off_by(with_twist.world_from_camera, truth) < 6.4e-5
    assert off_by(without.world_from_camera, truth) > 6.4e-4


def test_the_frame_before_gives_the_twist(make_lap: Callable) -> None:
    """From the pose before, pose and twist are found together."""
    lap = make_lap()
    view, points, truth = seen(lap, 40)
    approach = Approach(lap.world_from_camera[39], 1 / 60)
    found = localise(view, points, lap.world_from_camera[39], approach, OPTIONS)
    assert found is not None
    assert off_by(found.world_from_camera, truth) < 3e-4
    assert found.inliers.all()


def test_found_without_a_guess_among_outliers(make_lap: Callable) -> None:
    """With four rays in ten looking at wrong points, and no guess, the pose is found and the wrong rays named."""
    view, points, truth = seen(make_lap(noise_px=0.3), 50)
    rng = np.random.default_rng(1)
    wrong = rng.random(len(view)) < 0.4
    mixed = points.copy()
    mixed[wrong] = points[rng.permutation(np.flatnonzero(wrong))]
    start = search_pose(view, mixed, OPTIONS)
    assert start is not None
    assert off_by(start, truth) < 0.02
    found = localise(view, mixed, None, None, OPTIONS)
    assert found is not None
    displaced = np.linalg.norm(mixed - points, axis=1) > 0.05
    assert not (found.inliers & displaced).any()
    assert found.inliers[~displaced].mean() > 0.95


def test_covariance_is_honest(make_lap: Callable) -> None:
    """Over 120 frames of noise redrawn, mean NEES over 6 is 0.8 to 1.25 for a pose against known points."""
    lap = make_lap(row_time_s=0.0)
    view, points, truth = seen(lap, 60)
    rng = np.random.default_rng(2)
    ratios = []
    for _ in range(120):
        basis = np.linalg.pinv(view.whitening)
        rays = view.rays + (basis @ rng.standard_normal((len(view), 2, 1)))[..., 0]
        rays /= np.linalg.norm(rays, axis=1, keepdims=True)
        _, by_direction, _ = lap.lens.project_with_jacobians(rays)
        sigma = np.sqrt(0.3**2 + 0.3**2)
        noisy = View(0, 0, view.ids, view.uv, view.dt_s, rays, np.ascontiguousarray(by_direction / sigma), rays)
        found = refine_pose(noisy, points, truth, np.zeros(6))
        assert found is not None
        error = se3.log(se3.inverse(found.world_from_camera) @ truth)
        ratios.append(error @ np.linalg.solve(found.covariance, error) / 6)
    assert 0.8 < np.mean(ratios) < 1.25


def test_refused_without_agreement(make_lap: Callable) -> None:
    """Rays that look at shuffled points give no pose, and neither do too few rays."""
    view, points, _ = seen(make_lap(), 20)
    shuffled = np.random.default_rng(3).permutation(points)
    assert localise(view, shuffled, None, None, OPTIONS) is None
    few = np.arange(OPTIONS.min_inliers - 1)
    assert localise(view.select(few), points[few], None, None, OPTIONS) is None


def test_rays_to_one_point_do_not_determine_a_pose(make_lap: Callable) -> None:
    """Twenty rays to the same point leave the pose open, and that is said by returning none."""
    view, points, truth = seen(make_lap(), 20)
    rows = np.zeros(20, int)
    assert refine_pose(view.select(rows), points[rows], truth, np.zeros(6)) is None


@pytest.mark.parametrize("gap", [0.0, 2.0])
def test_a_guess_behind_the_points_is_searched_again(make_lap: Callable, gap: float) -> None:
    """From a guess that faces away, or is far off, localisation recovers by searching."""
    view, points, truth = seen(make_lap(noise_px=0.3), 25)
    guess = truth @ se3.exp([gap, 0.0, 0.0, 0.0, np.pi, 0.0])
    found = localise(view, points, guess, None, OPTIONS)
    assert found is not None
    assert off_by(found.world_from_camera, truth) < 0.02
