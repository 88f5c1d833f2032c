"""Trajectories: derivatives, presets."""

import numpy as np
import pytest
from pydantic import ValidationError

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import so3
from hybridtrack.synthesis.motion import CubicSpline, LapMotion, ReversingMotion, Sinusoids, Trajectory, looking


def random_trajectory(seed: int, spline: bool) -> Trajectory:
    """A trajectory of several metres and half a radian."""
    random = np.random.default_rng(seed)
    if spline:
        t = np.linspace(0.0, 2.0, 9)
        values = random.normal(size=(2, 9, 3))
        return Trajectory(np.eye(3), CubicSpline(t, values[0]), CubicSpline(t, 0.5 * values[1]))
    phases = random.uniform(0, 2 * np.pi, (2, 3, 3))
    position = Sinusoids(random.normal(size=3), random.normal(size=(3, 3)), np.array([0.3, 0.7, 1.9]), phases[0])
    rotation = Sinusoids(np.zeros(3), 0.3 * random.normal(size=(3, 3)), np.array([0.4, 1.1, 2.3]), phases[1])
    return Trajectory(looking(np.array([0.2, 1.0, -0.5])), position, rotation)


@pytest.mark.parametrize("spline", [True, False])
def test_derivatives_are_those_of_the_poses(spline: bool) -> None:
    """Velocity, acceleration and angular velocity agree with differences of the poses."""
    trajectory = random_trajectory(4, spline)
    t, h = np.linspace(0.2e9, 1.8e9, 40), 1e5
    before, now, after = (trajectory.poses(t + step) for step in (-h, 0.0, h))
    step_s = h * 1e-9
    velocity = (after[:, :3, 3] - before[:, :3, 3]) / (2 * step_s)
    np.testing.assert_allclose(trajectory.velocity(t), velocity, atol=2e-5)
    acceleration = (after[:, :3, 3] - 2 * now[:, :3, 3] + before[:, :3, 3]) / step_s**2
    np.testing.assert_allclose(trajectory.acceleration(t), acceleration, atol=2e-2)
    turned = so3.log(np.swapaxes(before[:, :3, :3], -1, -2) @ after[:, :3, :3]) / (2 * step_s)
    np.testing.assert_allclose(trajectory.angular_velocity(t), turned, atol=2e-5)


@pytest.mark.parametrize("spline", [True, False])
def test_twist_is_the_right_side_perturbation(spline: bool) -> None:
    """A twist's translation is the velocity in camera axes."""
    trajectory = random_trajectory(5, spline)
    t = np.linspace(0.2e9, 1.8e9, 7)
    R = trajectory.poses(t)[:, :3, :3]
    world = (R @ trajectory.twists(t)[:, :3, None])[..., 0]
    np.testing.assert_allclose(world, trajectory.velocity(t), atol=1e-12)


def test_spline_accelerates_without_jumps() -> None:
    """A spline's acceleration is continuous at its knots."""
    trajectory = random_trajectory(6, True)
    knot = 0.75e9
    before, after = trajectory.acceleration([knot - 10.0, knot + 10.0])
    np.testing.assert_allclose(before, after, atol=1e-4)


def test_lap_closes_and_is_several_metres_long() -> None:
    """After one lap the camera is back where it was, looking the same way."""
    motion = LapMotion()
    trajectory = motion.trajectory(np.random.default_rng(0))
    start, end = trajectory.poses([0.1e9, 0.1e9 + motion.lap_s * 1e9])
    np.testing.assert_allclose(start, end, atol=1e-9)
    way = np.linalg.norm(np.diff(trajectory.poses(np.linspace(0, motion.lap_s * 1e9, 2000))[:, :3, 3], axis=0), axis=1)
    assert 3.0 < way.sum() < 8.0


def test_reversing_reaches_the_speed_asked_for() -> None:
    """The point ahead at the stated distance moves at the peak speed in the middle of the swing, within a tenth."""
    motion, focal = ReversingMotion(peak_px_s=2000.0, rotation_share=0.4), 900.0
    trajectory = motion.trajectory(np.random.default_rng(1), focal)
    t = np.linspace(0, 2e9, 4000)
    twists = trajectory.twists(t)
    ahead = np.array([0.0, 0.0, motion.distance_m])
    moving = -twists[:, :3] - np.cross(twists[:, 3:], ahead)
    speed = focal * np.linalg.norm(moving[:, :2], axis=1) / motion.distance_m
    assert speed.max() == pytest.approx(2000.0, rel=0.1)


def test_reversing_takes_the_same_path_at_any_speed() -> None:
    """Twice the speed is the same path in half the time."""
    slow, fast = (
        ReversingMotion(peak_px_s=speed).trajectory(np.random.default_rng(2), 900.0) for speed in (600.0, 1200.0)
    )
    t = np.linspace(0, 0.5e9, 30)
    np.testing.assert_allclose(slow.poses(2 * t), fast.poses(t), atol=1e-12)


def test_reversing_at_no_speed_stands_still() -> None:
    """Speed zero is a still camera."""
    poses = ReversingMotion(peak_px_s=0.0).trajectory(np.random.default_rng(3), 900.0).poses([0.0, 1e9])
    assert np.array_equal(poses[0], poses[1])


def test_refusals() -> None:
    """Straight down has no level attitude; splines need rising times; presets have ranges."""
    with pytest.raises(ShapeError, match="off the vertical"):
        looking(np.array([0.0, 0.0, -1.0]))
    with pytest.raises(ShapeError, match="rising times"):
        CubicSpline(np.array([0.0, 1.0, 1.0, 2.0]), np.zeros((4, 3)))
    with pytest.raises(ValidationError, match="greater than 0"):
        LapMotion(lap_s=0.0)
