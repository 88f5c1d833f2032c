"""Bundle adjustment: Jacobians by differences, exact without noise, honest with it."""

from dataclasses import replace

import numpy as np
import pytest

from hybridtrack.geometry import se3, similarity
from hybridtrack.odometry.bundle import (
    Bundle,
    adjust,
    gauge_constraints,
    huber_weights,
    linearised,
    pose_covariance,
    residual_sigmas,
)

Array = np.ndarray


def make_bundle(seed: int, noise: float = 0.0, poses: int = 6, points: int = 60) -> tuple[Bundle, Array, Array]:
    """A bundle at its true poses and points, rays with noise in deviations of 1 mrad, at times of their own."""
    rng = np.random.default_rng(seed)
    true = se3.exp(np.concatenate([rng.normal(0, 0.4, (poses, 3)), rng.normal(0, 0.1, (poses, 3))], axis=1))
    cloud = rng.uniform(-1, 1, (points, 3)) + [0.0, 0.0, 4.0]
    pose_of, point_of = np.tile(np.arange(poses), points), np.repeat(np.arange(points), poses)
    twist = rng.normal(0, 1.0, (len(pose_of), 6)) * [1, 1, 1, 0.5, 0.5, 0.5]
    own = se3.exp(rng.uniform(-3e-3, 3e-3, (len(pose_of), 1)) * twist)
    local = se3.transform(own @ se3.inverse(true)[pose_of], cloud[point_of][:, None, :])[:, 0]
    rays = local / np.linalg.norm(local, axis=1, keepdims=True)
    basis = np.linalg.svd(rays[:, :, None])[0][:, :, 1:]
    rays = rays + 1e-3 * noise * (basis @ rng.standard_normal((len(rays), 2, 1)))[..., 0]
    rays /= np.linalg.norm(rays, axis=1, keepdims=True)
    whitening = np.swapaxes(np.linalg.svd(rays[:, :, None])[0][:, :, 1:], 1, 2) / 1e-3
    held = np.arange(poses) == 0
    return Bundle(true, held, cloud, pose_of, point_of, own, rays, np.ascontiguousarray(whitening)), true, cloud


def disturbed(bundle: Bundle, seed: int, size: float = 0.02) -> Bundle:
    rng = np.random.default_rng(seed)
    step = size * rng.standard_normal((len(bundle.poses), 6)) * ~bundle.held[:, None]
    points = bundle.points + size * rng.standard_normal(bundle.points.shape)
    return replace(bundle, poses=bundle.poses @ se3.exp(step), points=points)


def test_gradients_agree_with_differences() -> None:
    """J'r by the kernel equals half the difference quotient of the sum of squares, for poses and points."""
    bundle, _, _ = make_bundle(1, noise=1.0)
    bundle = disturbed(bundle, 2, 1e-3)
    system = linearised(bundle, bundle.poses, bundle.points, np.ones(len(bundle.rays)))

    def half_cost(poses: Array, points: Array) -> float:
        return 0.5 * float(np.sum(residual_sigmas(bundle, poses, points) ** 2))

    h = 1e-7
    for k in range(len(bundle.poses)):
        for i in range(6):
            forth, back = bundle.poses.copy(), bundle.poses.copy()
            forth[k], back[k] = forth[k] @ se3.exp(h * np.eye(6)[i]), back[k] @ se3.exp(-h * np.eye(6)[i])
            slope = (half_cost(forth, bundle.points) - half_cost(back, bundle.points)) / (2 * h)
            np.testing.assert_allclose(system.g_pose[k, i], slope, rtol=1e-5, atol=1e-2)
    for p in range(0, len(bundle.points), 7):
        for i in range(3):
            forth, back = bundle.points.copy(), bundle.points.copy()
            forth[p, i] += h
            back[p, i] -= h
            slope = (half_cost(bundle.poses, forth) - half_cost(bundle.poses, back)) / (2 * h)
            np.testing.assert_allclose(system.g_point[p, i], slope, rtol=1e-5, atol=1e-2)


def test_second_derivatives_agree_with_differences_of_residuals() -> None:
    """J'J of one ray, pose and cross blocks included, equals that of Jacobians by differences."""
    bundle, _, _ = make_bundle(3, poses=2, points=1)
    bundle = disturbed(bundle, 4, 1e-2)

    def residual(poses: Array, points: Array) -> Array:
        p = se3.transform(bundle.own_motion @ se3.inverse(poses)[bundle.pose_of], points[bundle.point_of][:, None])[
            :, 0
        ]
        n = p / np.linalg.norm(p, axis=1, keepdims=True)
        return (bundle.whitening @ n[..., None])[..., 0]

    h = 1e-6
    by_pose = np.empty((2, 2, 6))
    by_point = np.empty((2, 2, 3))
    for k in range(2):
        for i in range(6):
            ends = []
            for sign in (h, -h):
                poses = bundle.poses.copy()
                poses[k] = poses[k] @ se3.exp(sign * np.eye(6)[i])
                ends.append(residual(poses, bundle.points)[k])
            by_pose[k, :, i] = (ends[0] - ends[1]) / (2 * h)
    for i in range(3):
        step = h * np.eye(3)[i]
        both = residual(bundle.poses, bundle.points + step) - residual(bundle.poses, bundle.points - step)
        by_point[:, :, i] = both / (2 * h)
    system = linearised(bundle, bundle.poses, bundle.points, np.ones(2))
    np.testing.assert_allclose(system.H_pose, np.swapaxes(by_pose, 1, 2) @ by_pose, rtol=1e-4, atol=1.0)
    np.testing.assert_allclose(system.H_cross, np.swapaxes(by_pose, 1, 2) @ by_point, rtol=1e-4, atol=1.0)
    np.testing.assert_allclose(system.H_point[0], sum(b.T @ b for b in by_point), rtol=1e-4, atol=1.0)


def test_exact_without_noise() -> None:
    """From poses and points 2 cm off, with the first and last pose held, the true ones come back to rounding."""
    bundle, true, cloud = make_bundle(5)
    bundle.held[-1] = True
    result = adjust(disturbed(bundle, 6), iterations=60, relative_decrease=0.0)
    assert result.sigmas.max() < 1e-6
    np.testing.assert_allclose(result.points, cloud, atol=1e-8)
    np.testing.assert_allclose(result.poses, true, atol=1e-9)


def test_a_free_scale_keeps_its_unit() -> None:
    """With one pose held, the pose farthest from it keeps its distance; all else follows in that unit, exactly."""
    bundle, true, cloud = make_bundle(5)
    still = replace(bundle, own_motion=np.tile(np.eye(4), (len(bundle.rays), 1, 1)))
    local = se3.transform(se3.inverse(true)[bundle.pose_of], cloud[bundle.point_of][:, None])[:, 0]
    rays = local / np.linalg.norm(local, axis=1, keepdims=True)
    whitening = np.ascontiguousarray(np.swapaxes(np.linalg.svd(rays[:, :, None])[0][:, :, 1:], 1, 2) / 1e-3)
    start = disturbed(replace(still, rays=rays, whitening=whitening), 6)
    result = adjust(start, iterations=60, relative_decrease=0.0)
    assert result.sigmas.max() < 1e-6
    aligned = similarity(result.points, cloud)
    np.testing.assert_allclose(se3.affine_transform(aligned, result.points), cloud, atol=1e-8)
    lengths = [np.linalg.norm(poses[:, :3, 3] - poses[0, :3, 3], axis=1) for poses in (start.poses, result.poses)]
    np.testing.assert_allclose(lengths[1][np.argmax(lengths[0])], lengths[0].max(), rtol=1e-6)


def test_held_poses_do_not_move() -> None:
    """A held pose comes back bit for bit."""
    bundle, _, _ = make_bundle(7, noise=1.0)
    result = adjust(disturbed(bundle, 8))
    np.testing.assert_array_equal(result.poses[0], bundle.poses[0])


def test_gross_outliers_hardly_matter() -> None:
    """With one ray in ten turned by 3 degrees, the error stays within three times that without."""
    bundle, _, cloud = make_bundle(9, noise=1.0)
    rng = np.random.default_rng(0)
    wrong = rng.random(len(bundle.rays)) < 0.1
    turned = bundle.rays.copy()
    turned[wrong] += 0.05 * rng.standard_normal((wrong.sum(), 3))
    turned /= np.linalg.norm(turned, axis=1, keepdims=True)
    whitening = np.ascontiguousarray(np.swapaxes(np.linalg.svd(turned[:, :, None])[0][:, :, 1:], 1, 2) / 1e-3)

    def error(case: Bundle) -> float:
        points = adjust(disturbed(case, 10), iterations=40).points
        moved = se3.affine_transform(similarity(points, cloud), points)
        return float(np.median(np.linalg.norm(moved - cloud, axis=1)))

    assert error(replace(bundle, rays=turned, whitening=whitening)) < 3.0 * error(bundle)


def test_huber_weights_fall_outside_and_vanish_behind() -> None:
    """One inside the width, width over residual outside, zero for a point behind the camera."""
    np.testing.assert_allclose(huber_weights(np.array([0.0, 2.5, 5.0, np.inf])), [1.0, 1.0, 0.5, 0.0])


def test_covariance_obeys_its_gauge() -> None:
    """No direction that a similarity alignment removes has any variance left."""
    bundle, _, _ = make_bundle(11, noise=1.0)
    result = adjust(bundle)
    joint = pose_covariance(bundle, result)
    along = gauge_constraints(result.poses)
    assert np.abs(along @ joint @ along.T).max() < 1e-9 * np.trace(joint)
    assert np.linalg.eigvalsh(joint)[0] > -1e-9 * np.trace(joint)


def test_covariance_is_honest() -> None:
    """Over 60 draws of world and noise the errors after alignment average their covariance: 0.8 to 1.25."""
    ratios = []
    for seed in range(60):
        bundle, true, _ = make_bundle(100 + seed, noise=1.0)
        result = adjust(disturbed(bundle, seed), iterations=30, relative_decrease=1e-8)
        joint = pose_covariance(bundle, result)
        aligned = similarity(result.poses[:, :3, 3], true[:, :3, 3])
        scale = np.cbrt(np.linalg.det(aligned[:3, :3]))
        moved = result.poses.copy()
        moved[:, :3, 3] = se3.affine_transform(aligned, result.poses[:, :3, 3])
        moved[:, :3, :3] = aligned[:3, :3] / scale @ result.poses[:, :3, :3]
        errors = se3.log(se3.inverse(moved) @ true).ravel()
        units = np.tile([scale, scale, scale, 1.0, 1.0, 1.0], len(true))
        covariance = joint * np.outer(units, units)
        values, vectors = np.linalg.eigh(covariance)
        inside = values > 1e-9 * values[-1]
        assert inside.sum() == len(errors) - 7
        ratios.append(np.sum((vectors.T @ errors)[inside] ** 2 / values[inside]) / inside.sum())
    assert 0.8 < np.mean(ratios) < 1.25


@pytest.mark.parametrize("count", [1, 2])
def test_points_alone_can_be_adjusted(count: int) -> None:
    """With every pose held the points still converge."""
    bundle, _, cloud = make_bundle(13)
    moved = replace(bundle, held=np.ones(len(bundle.poses), bool), points=cloud + 0.01 * count)
    assert np.abs(adjust(moved, relative_decrease=0.0).points - cloud).max() < 1e-9
