"""Points from rays: exact, honest, and the three refusals."""

import numpy as np
import pytest

from hybridtrack.geometry import se3
from hybridtrack.odometry.triangulation import Sightings, nearest_to_rays, point_residuals, triangulate

Array = np.ndarray
SIGMA_RAD = 1e-3


def sightings(points: Array, poses: Array, noise: float = 0.0, seed: int = 0) -> Sightings:
    """Every point seen from every pose, rays with noise in deviations of 1 mrad."""
    rng = np.random.default_rng(seed)
    group = np.repeat(np.arange(len(points)), len(poses))
    pose_of = np.tile(np.arange(len(poses)), len(points))
    local = se3.transform(se3.inverse(poses)[pose_of], points[group][:, None])[:, 0]
    rays = local / np.linalg.norm(local, axis=1, keepdims=True)
    basis = np.linalg.svd(rays[:, :, None])[0][:, :, 1:]
    rays = rays + SIGMA_RAD * noise * (basis @ rng.standard_normal((len(rays), 2, 1)))[..., 0]
    rays /= np.linalg.norm(rays, axis=1, keepdims=True)
    whitening = np.swapaxes(np.linalg.svd(rays[:, :, None])[0][:, :, 1:], 1, 2) / SIGMA_RAD
    return Sightings(group, poses[pose_of, :3, 3], poses[pose_of, :3, :3], rays, whitening)


def row_of_poses(count: int = 5, length: float = 0.6) -> Array:
    rng = np.random.default_rng(4)
    twists = rng.normal(0, 0.03, (count, 6))
    twists[:, 0] += np.linspace(0, length, count)
    return se3.exp(twists)


def cloud(count: int = 50) -> Array:
    return np.random.default_rng(5).uniform([-1, -1, 3], [1, 1, 5], (count, 3))


def test_exact_without_noise() -> None:
    """Two rays or five, the point is where they meet."""
    for poses in (row_of_poses(2), row_of_poses(5)):
        seen = sightings(cloud(), poses)
        np.testing.assert_allclose(nearest_to_rays(seen), cloud(), atol=1e-9)
        result = triangulate(seen, np.deg2rad(1.0), 4.0)
        assert result.accepted.all()
        np.testing.assert_allclose(result.positions, cloud(), atol=1e-9)


def test_jacobian_agrees_with_differences() -> None:
    """The residuals' slope along each axis of the point."""
    seen = sightings(cloud(8), row_of_poses(), noise=1.0)
    positions = cloud(8) + 0.01
    _, jacobian, _ = point_residuals(seen, positions)
    for axis in range(3):
        step = 1e-6 * np.eye(3)[axis]
        slope = (point_residuals(seen, positions + step)[0] - point_residuals(seen, positions - step)[0]) / 2e-6
        np.testing.assert_allclose(jacobian[:, :, axis], slope, rtol=1e-5, atol=1e-3)


def test_errors_are_those_of_the_normal_equations() -> None:
    """Over 400 points the squared error in units of its covariance averages three to within 15 %."""
    points, poses = cloud(400), row_of_poses()
    seen = sightings(points, poses, noise=1.0, seed=7)
    result = triangulate(seen, 0.0, 10.0)
    _, jacobian, _ = point_residuals(seen, result.positions)
    blocks = (np.swapaxes(jacobian, 1, 2) @ jacobian).reshape(len(points), len(poses), 3, 3).sum(axis=1)
    errors = result.positions - points
    values = np.einsum("ni,nij,nj->n", errors, blocks, errors)
    assert abs(values.mean() / 3.0 - 1.0) < 0.15


def test_parallax_is_the_angle_between_rays() -> None:
    """A point straight ahead at 2 m between poses 20 cm apart is seen under 2 atan(0.05)."""
    poses = se3.compose(np.eye(3), np.array([[-0.1, 0, 0], [0.1, 0, 0.0]]))
    result = triangulate(sightings(np.array([[0.0, 0.0, 2.0]]), poses), 0.0, 4.0)
    np.testing.assert_allclose(result.parallax_rad, 2.0 * np.arctan(0.05), rtol=1e-9)


def test_small_angles_are_refused() -> None:
    """Rays that meet at less than the gate are no point."""
    result = triangulate(sightings(cloud(), row_of_poses(length=0.02)), np.deg2rad(3.0), 4.0)
    assert not result.accepted.any()


def test_points_behind_are_refused() -> None:
    """Rays that meet behind the cameras meet at no point that was seen."""
    seen = sightings(cloud(), row_of_poses())
    behind = Sightings(seen.group, seen.centres, seen.turns, -seen.rays, seen.whitening)
    assert not triangulate(behind, 0.0, 1e9).accepted.any()


def test_rays_that_do_not_meet_are_refused() -> None:
    """One ray of five turned by a degree spoils its point and no other."""
    seen = sightings(cloud(), row_of_poses())
    rays = seen.rays.copy()
    rays[12] = se3.exp([0, 0, 0, np.deg2rad(1.0), 0, 0])[:3, :3] @ rays[12]
    whitening = seen.whitening.copy()
    whitening[12] = np.linalg.svd(rays[12][:, None])[0][:, 1:].T / SIGMA_RAD
    result = triangulate(Sightings(seen.group, seen.centres, seen.turns, rays, whitening), 0.0, 4.0)
    assert not result.accepted[seen.group[12]]
    assert result.accepted.sum() == len(cloud()) - 1


@pytest.mark.parametrize("count", [1, 3])
def test_parallel_rays_have_no_point(count: int) -> None:
    """From one place, or along one ray, no position is claimed."""
    poses = np.tile(np.eye(4), (count, 1, 1))
    result = triangulate(sightings(cloud(4), poses), 0.0, 4.0)
    assert np.isnan(result.positions).all() or not result.accepted.any()
