"""Inertial samples."""

import numpy as np
import pytest

from hybridtrack.geometry import so3
from hybridtrack.synthesis.imu import GRAVITY_M_S2, ImuRecipe, simulate_imu
from hybridtrack.synthesis.motion import LapMotion, ReversingMotion

PERFECT = ImuRecipe(rate_hz=1000.0, gyro_noise=0, accel_noise=0, gyro_bias=0, accel_bias=0, gyro_walk=0, accel_walk=0)


def test_perfect_samples_integrate_to_the_truth() -> None:
    """Two seconds of noiseless samples, integrated by the trapezoid rule, end at the true pose: 0.2 mm, 20 urad."""
    trajectory = LapMotion(sway_deg=4.0).trajectory(np.random.default_rng(0))
    imu = simulate_imu(trajectory, 0, 2_000_000_001, PERFECT, 0)
    pose, velocity = trajectory.poses([0.0])[0], trajectory.velocity([0.0])[0]
    R, p = pose[:3, :3], pose[:3, 3]
    for i in range(len(imu.t) - 1):
        dt = (imu.t[i + 1] - imu.t[i]) * 1e-9
        R_next = R @ so3.exp(0.5 * (imu.gyro[i] + imu.gyro[i + 1]) * dt)
        first, second = R @ imu.accel[i] + GRAVITY_M_S2, R_next @ imu.accel[i + 1] + GRAVITY_M_S2
        p = p + velocity * dt + (2 * first + second) / 6 * dt**2
        velocity = velocity + 0.5 * (first + second) * dt
        R = R_next
    truth = trajectory.poses(imu.t[-1:])[0]
    assert np.linalg.norm(p - truth[:3, 3]) < 2e-4
    assert np.linalg.norm(so3.log(truth[:3, :3].T @ R)) < 2e-5


def test_camera_at_rest_feels_gravity_upwards() -> None:
    """At rest the accelerometer shows 9.807 m/s^2 against gravity, in camera axes, and the gyro nothing."""
    motion = ReversingMotion(peak_px_s=0.0, pitch_deg=30.0, amplitude_px=1e-3)
    imu = simulate_imu(motion.trajectory(np.random.default_rng(0), 900.0), 0, 10_000_000, PERFECT, 0)
    down = np.array([0.0, np.cos(np.deg2rad(30)), np.sin(np.deg2rad(30))])  # y of the camera points mostly down
    np.testing.assert_allclose(imu.accel, np.tile(-9.80665 * down, (len(imu.t), 1)), atol=1e-4)
    np.testing.assert_allclose(imu.gyro, 0.0, atol=1e-12)


def test_noise_and_bias_have_the_sizes_asked_for() -> None:
    """White noise has density times root rate a sample; the mean error over seeds has the bias's deviation."""
    trajectory = ReversingMotion(peak_px_s=0.0).trajectory(np.random.default_rng(0), 900.0)
    recipe = ImuRecipe(rate_hz=500.0, gyro_noise=1e-3, gyro_bias=0.02, gyro_walk=0.0)
    gyro = np.array([simulate_imu(trajectory, 0, 200_000_000, recipe, seed).gyro for seed in range(120)])
    assert gyro.std(axis=1).mean() == pytest.approx(1e-3 * np.sqrt(500), rel=0.05)
    assert gyro.mean(axis=1).std() == pytest.approx(0.02, rel=0.15)


def test_same_seed_same_samples() -> None:
    """One seed, one result; another seed, another."""
    trajectory = LapMotion().trajectory(np.random.default_rng(0))
    first, again, other = (simulate_imu(trajectory, 0, 100_000_000, ImuRecipe(), seed) for seed in (1, 1, 2))
    assert np.array_equal(first.accel, again.accel)
    assert not np.array_equal(first.accel, other.accel)
