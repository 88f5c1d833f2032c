"""When a frame becomes a keyframe, and which keyframes are adjusted together with it."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.odometry.observations import View
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.sparse_map import Keyframe, SparseMap

Array = np.ndarray


@dataclass(frozen=True)
class Overlap:
    """How a frame compares with a keyframe: `flow_px` median motion of shared tracks, `shared` their number, `share` of
    the keyframe's tracks that are still there."""

    flow_px: float
    shared: int
    share: float


def overlap(keyframe: Keyframe, view: View) -> Overlap:
    """Compare a frame with a keyframe by the tracks they share."""
    _, a, b = np.intersect1d(keyframe.view.ids, view.ids, assume_unique=True, return_indices=True)
    if not len(a):
        return Overlap(float("inf"), 0, 0.0)
    flow = np.linalg.norm(view.uv[b] - keyframe.view.uv[a], axis=1)
    return Overlap(float(np.median(flow)), len(a), len(a) / len(keyframe.view))


def wants_keyframe(last: Keyframe, view: View, mapped: int, width_px: int, options: OdometryOptions) -> bool:
    """Whether `view`, of whose rays `mapped` have points, should become a keyframe after `last`.

    Yes where the picture has moved by a share of its width, where many tracks are new since, or where few of its rays
    have points yet and there has been some motion to find them by.
    """
    now = overlap(last, view)
    if now.flow_px > options.keyframe_flow_share * width_px or now.share < options.keyframe_overlap:
        return True
    hungry = mapped < 0.6 * len(view) or mapped < 2 * options.weak_inliers
    return hungry and now.flow_px > 0.25 * options.keyframe_flow_share * width_px


def window(world: SparseMap, newest: Keyframe, options: OdometryOptions) -> tuple[list[int], list[int]]:
    """Ids of keyframes to adjust with the newest, and of those that hold them in place.

    Held are all others that see the same points; where there are none, the oldest of the window is.
    """
    free = sorted([newest.id, *world.neighbours(newest, options.window_keyframes - 1)])
    points = np.unique(np.concatenate([world.keyframes[i].points for i in free]))
    points = points[points >= 0]
    around = {other for i in free for other in world.covisibility.adj[i]} - set(free)
    held = sorted(i for i in around if np.isin(world.keyframes[i].points, points).any())
    if not held:
        held, free = free[:1], free[1:]
    return free, held
