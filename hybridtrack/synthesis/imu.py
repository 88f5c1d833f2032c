"""Inertial samples along a trajectory, in camera axes: rate gyro and accelerometer with bias and noise.

The accelerometer measures specific force, `R^T (a - g)`. White noise of density d (per root hertz) has the deviation
d sqrt(rate) a sample; biases start at a drawn value and wander as random walks (common practice).
"""

import numpy as np
from pydantic import Field

from hybridtrack.recording import Imu
from hybridtrack.synthesis.motion import Trajectory
from hybridtrack.synthesis.recipe_parts import Strict

GRAVITY_M_S2 = np.array([0.0, 0.0, -9.80665])


class ImuRecipe(Strict):
    """Rate, noise densities, spread of the first bias, and the biases' random walks."""

    rate_hz: float = Field(default=500.0, gt=0)
    gyro_noise: float = Field(default=1.5e-4, ge=0, description="rad/s per root hertz")
    accel_noise: float = Field(default=1.2e-3, ge=0, description="m/s^2 per root hertz")
    gyro_bias: float = Field(default=3e-3, ge=0, description="rad/s")
    accel_bias: float = Field(default=3e-2, ge=0, description="m/s^2")
    gyro_walk: float = Field(default=2e-5, ge=0, description="rad/s^2 per root hertz")
    accel_walk: float = Field(default=2e-4, ge=0, description="m/s^3 per root hertz")


def _disturbed(
    truth: np.ndarray, rate_hz: float, spread: tuple[float, float, float], random: np.random.Generator
) -> np.ndarray:
    """`truth` (N, 3) with bias, walk and noise; `spread`: deviation of the bias, densities of walk and noise."""
    bias, walk, noise = spread
    steps = random.standard_normal(truth.shape) * walk / np.sqrt(rate_hz)
    steps[0] = bias * random.standard_normal(3)
    return truth + np.cumsum(steps, axis=0) + noise * np.sqrt(rate_hz) * random.standard_normal(truth.shape)


def simulate_imu(trajectory: Trajectory, t0_ns: int, t1_ns: int, recipe: ImuRecipe, seed: int) -> Imu:
    """Samples from `t0_ns` up to `t1_ns` on the event clock."""
    random = np.random.default_rng([seed, 21])
    t = np.rint(np.arange(t0_ns, t1_ns, 1e9 / recipe.rate_hz)).astype(np.int64)
    R = trajectory.poses(t)[:, :3, :3]
    force = (np.swapaxes(R, -1, -2) @ (trajectory.acceleration(t) - GRAVITY_M_S2)[..., None])[..., 0]
    gyro = _disturbed(
        trajectory.angular_velocity(t), recipe.rate_hz, (recipe.gyro_bias, recipe.gyro_walk, recipe.gyro_noise), random
    )
    accel = _disturbed(force, recipe.rate_hz, (recipe.accel_bias, recipe.accel_walk, recipe.accel_noise), random)
    return Imu(t, gyro, accel)
