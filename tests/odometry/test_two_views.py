"""Candidate motions between two views."""

from collections.abc import Callable

import numpy as np
import pytest

from hybridtrack.geometry import se3
from hybridtrack.odometry.two_views import (
    candidate_motions,
    rotation_between,
    shared_rows,
    sigma_from_rotation,
)

Array = np.ndarray


def closest(candidates: list[Array], truth: Array) -> tuple[float, float]:
    """Least error of rotation and of direction, in degrees, of the candidate whose sum of both is least."""
    errors = []
    for motion in candidates:
        turn = np.linalg.norm(se3.log(se3.inverse(motion) @ truth)[3:])
        a, b = (pose[:3, 3] / np.linalg.norm(pose[:3, 3]) for pose in (motion, truth))
        errors.append((np.rad2deg(turn), np.rad2deg(np.arccos(np.clip(a @ b, -1, 1)))))
    return min(errors, key=sum)


@pytest.mark.parametrize("planar", [False, True])
@pytest.mark.parametrize("noise", [0.0, 0.3])
def test_the_true_motion_is_among_the_candidates(make_lap: Callable, planar: bool, noise: float) -> None:
    """In depth or in a plane, one candidate is the true motion: to rounding without noise (global shutter), to half a
    degree of turn and five of direction with it."""
    lap = make_lap(planar=planar, noise_px=noise, row_time_s=0.0, drifting_share=0.1 if noise else 0.0)
    views = lap.views(0.1)
    a, b = views[20], views[30]
    truth = se3.inverse(lap.world_from_camera[30]) @ lap.world_from_camera[20]
    turn_deg, direction_deg = closest(candidate_motions(a, b, 1), truth)
    assert turn_deg < (0.5 if noise else 1e-3)
    assert direction_deg < (5.0 if noise else 1e-2)


def test_shared_rows_name_the_same_tracks(make_lap: Callable) -> None:
    """Rows of both views are of the same tracks, in the same order."""
    views = make_lap().views(0.1)
    rows_a, rows_b = shared_rows(views[10], views[40])
    assert len(rows_a) > 20
    np.testing.assert_array_equal(views[10].ids[rows_a], views[40].ids[rows_b])


def test_a_rotation_is_found_among_outliers() -> None:
    """With a third of the rays elsewhere the rotation is right to 0.01 degrees."""
    rng = np.random.default_rng(1)
    rays = rng.normal(0, 0.3, (90, 3)) + [0, 0, 1.0]
    rays /= np.linalg.norm(rays, axis=1, keepdims=True)
    truth = se3.exp([0, 0, 0, 0.1, -0.2, 0.3])[:3, :3]
    turned = rays @ truth.T
    turned[:30] += rng.normal(0, 0.1, (30, 3))
    turned /= np.linalg.norm(turned, axis=1, keepdims=True)
    turn, angles = rotation_between(rays, turned, rounds=30)
    assert np.rad2deg(np.linalg.norm(se3.log(se3.compose(turn.T @ truth, np.zeros(3)))[3:])) < 0.01
    assert np.median(angles[30:]) < np.deg2rad(0.01)


def test_rotation_explains_a_turn_and_not_a_lap(make_lap: Callable) -> None:
    """A camera that turns is told from one that travels by how many deviations a rotation leaves."""
    turning = make_lap(path="turn", noise_px=0.3).views(0.3)
    assert sigma_from_rotation(turning[0], turning[20]) < 1.5
    travelling = make_lap(noise_px=0.3).views(0.3)
    assert sigma_from_rotation(travelling[0], travelling[10]) > 8.0


def test_too_few_shared_rays_give_no_candidates(make_lap: Callable) -> None:
    """Fewer than eight tracks in common are no ground for a motion."""
    views = make_lap().views(0.1)
    assert candidate_motions(views[0].select(np.arange(5)), views[10], 1) == []
    assert sigma_from_rotation(views[0].select(np.arange(3)), views[10]) == 0.0
