"""Giving new tracks old points: after a loss the tracker starts afresh, but the corners are the same."""

import numpy as np
from scipy.spatial import cKDTree

from hybridtrack.geometry import se3
from hybridtrack.odometry.observations import View
from hybridtrack.odometry.sparse_map import SparseMap

Array = np.ndarray

REACH_SIGMA = 10.0


def known_points(world: SparseMap, keyframe_ids: list[int]) -> Array:
    """Sorted ids of the points that any of some keyframes sees."""
    points = np.unique(np.concatenate([world.keyframes[i].points for i in keyframe_ids]))
    return points[points >= 0]


def associate(world: SparseMap, view: View, pose: Array, points: Array) -> tuple[Array, Array]:
    """Rows (M,) of a view, its rays at one time, and the points (M,) they look at from `pose` (4, 4): nearest to each
    other, within 10 standard deviations of a ray."""
    if not len(points) or not len(view):
        return np.empty(0, np.int64), np.empty(0, np.int64)
    seen = se3.transform(se3.inverse(pose), world.positions[points])
    directions = seen / np.maximum(np.linalg.norm(seen, axis=1, keepdims=True), 1e-12)
    distance, nearest = cKDTree(directions).query(view.rays, distance_upper_bound=REACH_SIGMA * view.ray_sigma_rad)
    rows = np.flatnonzero(np.isfinite(distance))
    order = rows[np.argsort(distance[rows])]
    _, first = np.unique(nearest[order], return_index=True)
    chosen = np.sort(order[first])
    return chosen, points[nearest[chosen]]
