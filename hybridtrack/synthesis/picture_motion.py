"""How fast the picture moves, and the instants at which it must be looked at.

Probe rays spread over the array meet the scene; the speed of the point that each meets follows from the camera's exact
velocity and the lens's derivative.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.geometry import Lens
from hybridtrack.geometry.arrays import FloatArray
from hybridtrack.synthesis.motion import Trajectory
from hybridtrack.synthesis.raycast import cast
from hybridtrack.synthesis.scene import Scene

Array = np.ndarray

_PROBES = (16, 10)
_CAST_STEP_NS = 10e6
_SPEED_STEP_NS = 1e6


@dataclass(frozen=True)
class PictureMotion:
    """Speeds on the colour array at times (T,) over probes, px/s: the median, the ninth decile and the highest.

    `way_px` (T,) is the integral of the ninth decile: nine tenths of the picture move no further between two times.
    """

    t_ns: FloatArray
    median_px_s: FloatArray
    upper_px_s: FloatArray
    highest_px_s: FloatArray
    way_px: FloatArray

    def way_between(self, t0_ns: float, t1_ns: float) -> float:
        """How far nine tenths of the picture move at most between two times, px."""
        return float(np.diff(np.interp([t0_ns, t1_ns], self.t_ns, self.way_px))[0])

    def instants_ns(self, t0_ns: float, t1_ns: float, step_px: float, longest_ns: float) -> FloatArray:
        """Times from t0 to t1, both included, no more than `step_px` of motion and `longest_ns` apart."""
        times = np.union1d([t0_ns, t1_ns], self.t_ns[(self.t_ns > t0_ns) & (self.t_ns < t1_ns)])
        way = np.interp(times, self.t_ns, self.way_px)
        # A clock that runs with the way and, where nothing moves, with time.
        clock = way / step_px + (times - times[0]) / longest_ns
        clock -= clock[0]
        count = max(int(np.ceil(clock[-1])), 1)
        return np.interp(np.linspace(0.0, clock[-1], count + 1), clock, times)


def probe_pixels(width: int, height: int) -> FloatArray:
    """Positions (N, 2) of probes over the colour array."""
    across, down = ((np.arange(n) + 0.5) / n for n in _PROBES)
    u, v = np.meshgrid(across * width - 0.5, down * height - 0.5)
    return np.stack([u, v], axis=-1).reshape(-1, 2)


def point_speeds(lens: Lens, points: FloatArray, twists: FloatArray) -> FloatArray:
    """Speeds (T, N) px/s of world-fixed points, camera coordinates (T, N, 3), seen by a camera with twists (T, 6).

    A fixed point moves by `-v - omega x p` in camera axes.
    """
    velocity = -twists[:, None, :3] - np.cross(twists[:, None, 3:], points)
    _, d_uv_d_point, _ = lens.project_with_jacobians(points)
    return np.linalg.norm((d_uv_d_point @ velocity[..., None])[..., 0], axis=-1)


def picture_motion(
    scene: Scene, lens: Lens, size: tuple[int, int], trajectory: Trajectory, t0_ns: float, t1_ns: float
) -> PictureMotion:
    """Speeds of the picture of a colour array of `size` (width, height) from t0 to t1.

    Depths are looked up every 10 ms and carried along; speeds are taken every 1 ms.
    """
    directions = lens.unproject(probe_pixels(*size), allow_outside=True)
    directions = directions[np.isfinite(directions).all(axis=-1)]
    casts = np.linspace(t0_ns, t1_ns, max(int(np.ceil((t1_ns - t0_ns) / _CAST_STEP_NS)), 1) + 1)
    poses = trajectory.poses(casts)
    rays = np.tile(directions, (len(casts), 1))
    hits = cast(scene, poses, rays, np.repeat(np.arange(len(casts)), len(directions)))
    distance = np.where(np.isfinite(hits.distance), hits.distance, 1e6).reshape(len(casts), -1)
    times = np.linspace(t0_ns, t1_ns, max(int(np.ceil((t1_ns - t0_ns) / _SPEED_STEP_NS)), 1) + 1)
    nearest = np.rint(np.interp(times, casts, np.arange(len(casts)))).astype(np.int64)
    speeds = point_speeds(lens, directions * distance[nearest][..., None], trajectory.twists(times))
    # Where the lens reaches all probes the plain quantile serves, many times faster.
    quantile = np.nanquantile if np.isnan(speeds).any() else np.quantile
    median, upper, highest = quantile(speeds, [0.5, 0.9, 1.0], axis=1)
    steps = 0.5 * (upper[1:] + upper[:-1]) * np.diff(times) * 1e-9
    return PictureMotion(times, median, upper, highest, np.concatenate([[0.0], np.cumsum(steps)]))
