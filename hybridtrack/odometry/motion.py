"""Pose at an observation's own time: constant velocity around a frame.

T(t) = T_frame exp((t - t_frame) w), w the body twist in 1/s. The step E = exp(dt w) does not depend on the pose, so a
right perturbation xi of the frame's pose acts exactly: p_camera = E^-1 exp(-xi) T_frame^-1 p_world.
"""

from collections.abc import Sequence

import numpy as np

from hybridtrack.geometry import se3, so3

Array = np.ndarray


def twist_between(world_from_a: Array, world_from_b: Array, dt_s: float) -> Array:
    """Body twist (6,) per second that takes pose a to pose b (4, 4) in `dt_s`."""
    return np.asarray(se3.log(se3.inverse(world_from_a) @ world_from_b) / dt_s)


def camera_from_frame(twist: Array, dt_s: Array) -> Array:
    """E^-1 (N, 4, 4): from camera axes at the frame's time to those at `dt_s` (N,) later, along one twist (6,).

    The exponential of `geometry.se3` with the axis, which all have in common, taken out.
    """
    rate = float(np.linalg.norm(twist[3:]))
    axis = so3.hat(twist[3:] / rate) if rate > 0.0 else np.zeros((3, 3))
    square = axis @ axis
    angle = -rate * dt_s[:, None, None]
    safe = np.where(angle == 0.0, 1.0, angle)
    # 1 - cos a, without cancelling
    versine = 2.0 * np.sin(0.5 * angle) ** 2
    steps = np.zeros((len(dt_s), 4, 4))
    steps[:, :3, :3] = np.eye(3) + np.sin(angle) * axis + versine * square
    shape = np.eye(3) + versine / safe * axis + (angle - np.sin(angle)) / safe * square
    steps[:, :3, 3] = -dt_s[:, None] * (shape @ twist[:3])
    steps[:, 3, 3] = 1.0
    return steps


def twists_along(t_s: Array, poses: Sequence[Array | None], longest_gap_s: float) -> Array:
    """Body twist (K, 6) at every pose by central differences, one-sided at ends and gaps, zero where it stands alone.

    `poses`: (4, 4) or None where lost.
    """
    twists = np.zeros((len(poses), 6))
    for k, here in enumerate(poses):
        if here is None:
            continue
        around = [here if i == k else poses[i] if 0 <= i < len(poses) else None for i in (k - 1, k, k + 1)]
        usable = [
            i
            for i, pose in zip((k - 1, k, k + 1), around, strict=True)
            if pose is not None and abs(t_s[i] - t_s[k]) <= longest_gap_s
        ]
        first, last = usable[0], usable[-1]
        if last > first:
            twists[k] = twist_between(poses[first], poses[last], t_s[last] - t_s[first])  # type: ignore[arg-type]
    return twists
