"""Ideal pictures and true tracks of a world: what a perfect camera would see, and where points really go.

Only benchmarks and tests may use these; nothing that estimates does.
"""

from collections.abc import Iterator

import numpy as np

from hybridtrack.geometry import Lens, se3
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.module import HybridModule
from hybridtrack.synthesis.motion import Trajectory
from hybridtrack.synthesis.raycast import cast
from hybridtrack.synthesis.scene import Scene
from hybridtrack.synthesis.view import View

Array = np.ndarray

# A point counts as hidden where something lies nearer than it by more than this part of its distance.
_HIDDEN_BY = 2e-3


def sharp_picture(view: View, t_ns: float) -> Array:
    """The picture at one instant, float32 (rows, columns) in DN, black level included, not rounded and not clipped.

    It has the frame mode's resolution, no blur, skew, noise or flicker, and the frame mode's black level.
    """
    return view.sharp_light(t_ns) + np.float32(view.module.frame_mode.black_dn)


def sharp_pictures(view: View, t_ns: Array) -> Iterator[Array]:
    """Yield the sharp picture, rounded to the frame mode's DN as uint8 or uint16, at each of the times (T,)."""
    mode = view.module.frame_mode
    kind = np.uint8 if mode.white_dn <= 255 else np.uint16
    for t in np.asarray(t_ns, float):
        yield np.clip(np.rint(sharp_picture(view, float(t))), 0, mode.white_dn).astype(kind)


def points_seen(
    scene: Scene, lens: Lens, trajectory: Trajectory, uv: FloatArray, t_ns: Array
) -> tuple[FloatArray, Array]:
    """World points (N, 3) at colour-array positions `uv` (N, 2) seen at times `t_ns` (N,), and their surfaces (N,).

    NaN and -1 where nothing is met, or the lens does not reach.
    """
    t = np.asarray(t_ns, float)
    order = np.argsort(t, kind="stable")
    times, pose_of_ray = np.unique(t[order], return_inverse=True)
    poses = trajectory.poses(times)
    directions = lens.unproject(uv[order], allow_outside=True)
    reached = np.asarray(np.isfinite(directions).all(axis=-1))
    hits = cast(scene, poses, np.where(reached[:, None], directions, [0.0, 0.0, 1.0]), pose_of_ray)
    points, surface = np.empty((len(uv), 3)), np.empty(len(uv), np.int64)
    met = reached & (hits.surface >= 0)
    surface[order] = np.where(met, hits.surface, -1)
    points[order] = np.where(met[:, None], scene.points(np.maximum(hits.surface, 0), hits.place), np.nan)
    return points, surface


def visible_points(
    scene: Scene, module: HybridModule, trajectory: Trajectory, points: FloatArray, times_ns: Array
) -> tuple[FloatArray, Array]:
    """Where world points (N, 3) are on the colour array at times (T,): uv (T, N, 2) and whether they are seen (T, N).

    A point is seen where it projects onto the array and no surface lies before it. Raw, distorted px of a global
    shutter; NaN where there is no projection.
    """
    lens, array = module.lens_model(), module.colour_array
    poses = trajectory.poses(np.asarray(times_ns, float))
    p_camera = se3.transform(se3.inverse(poses), np.broadcast_to(points, (len(poses), *points.shape)))
    uv = lens.project(p_camera)
    with np.errstate(invalid="ignore"):
        on_array = np.asarray(np.all((uv >= -0.5) & (uv <= np.array([array.width, array.height]) - 0.5), axis=-1))
    rows = np.nonzero(on_array)
    distance = np.linalg.norm(p_camera[rows], axis=-1)
    hits = cast(scene, poses, p_camera[rows] / distance[:, None], rows[0])
    visible = np.zeros(on_array.shape, bool)
    visible[rows] = hits.distance >= distance * (1.0 - _HIDDEN_BY)
    return uv, visible


def truth_tracks(
    scene: Scene, module: HybridModule, trajectory: Trajectory, uv: FloatArray, t0_ns: Array, times_ns: Array
) -> tuple[FloatArray, Array]:
    """True tracks of seeds: uv (T, N, 2) at `times_ns` (T,) and whether they are seen (T, N).

    Seeds lie at colour-array positions `uv` (N, 2) at times `t0_ns` (N,) or one for all, event clock: for a seed from a
    frame, the middle of its row's exposure. Seeds that meet nothing are NaN and never seen.
    """
    uv = with_trailing_shape(uv, "uv", ("N", 2))
    points, _ = points_seen(scene, module.lens_model(), trajectory, uv, np.broadcast_to(t0_ns, len(uv)))
    return visible_points(scene, module, trajectory, points, times_ns)
