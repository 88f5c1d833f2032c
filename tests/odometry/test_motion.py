"""Pose at a ray's own time."""

import numpy as np
import pytest

from hybridtrack.geometry import se3
from hybridtrack.odometry.motion import camera_from_frame, twist_between, twists_along


def test_twist_takes_one_pose_to_the_other() -> None:
    """Half the time takes half the way, along the same screw."""
    a = se3.exp([1.0, 2.0, 3.0, 0.1, 0.2, 0.3])
    b = a @ se3.exp([0.1, 0.0, -0.2, 0.3, 0.0, 0.1])
    twist = twist_between(a, b, 0.5)
    np.testing.assert_allclose(a @ se3.exp(0.5 * twist), b, atol=1e-12)
    later = a @ se3.inverse(camera_from_frame(twist, np.array([0.5])))[0]
    np.testing.assert_allclose(later, b, atol=1e-12)


def test_twists_are_exact_at_constant_velocity() -> None:
    """Along a screw every pose has its twist, at the ends and beside a lost pose too; alone it is zero."""
    screw = np.array([0.5, 0.0, 0.1, 0.0, 0.3, 0.0])
    t_s = np.arange(6) * 0.02
    poses = [se3.exp(t * screw) for t in t_s]
    np.testing.assert_allclose(twists_along(t_s, poses, 0.1), np.tile(screw, (6, 1)), atol=1e-12)
    with_gap = [poses[0], poses[1], None, poses[3], None, poses[5]]
    found = twists_along(t_s, with_gap, 0.1)
    np.testing.assert_allclose(found[[0, 1]], np.tile(screw, (2, 1)), atol=1e-12)
    assert not found[[2, 3, 4, 5]].any()


def test_a_long_gap_is_not_bridged() -> None:
    """A neighbour beyond the longest gap is no neighbour."""
    poses = [np.eye(4), se3.exp([1.0, 0, 0, 0, 0, 0])]
    assert not twists_along(np.array([0.0, 1.0]), poses, 0.2).any()


@pytest.mark.parametrize("turning", [0.0, 1e-9, 0.3, 40.0])
def test_steps_along_a_twist_are_the_exponential(turning: float) -> None:
    """The step back along a twist agrees with the exponential of the Lie group, slow and fast."""
    twist = np.array([0.5, -1.0, 0.2, turning, 0.5 * turning, -turning])
    dt_s = np.array([-0.02, 0.0, 1e-6, 0.01])
    np.testing.assert_allclose(camera_from_frame(twist, dt_s), se3.exp(-dt_s[:, None] * twist), atol=1e-14)
