"""Growing the map at a keyframe: new points, local bundle adjustment, and dropping what does not fit."""

import numpy as np

from hybridtrack.odometry.bundle import Adjusted, adjust
from hybridtrack.odometry.keyframes import window
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.sparse_map import BundleIndex, Keyframe, SparseMap, assemble
from hybridtrack.odometry.triangulation import Sightings, triangulate

Array = np.ndarray

LOOK_BACK = 12


def sightings_of(
    world: SparseMap, keyframe_ids: list[int], track_ids: Array, trusted_from: dict[int, int] | None = None
) -> tuple[Sightings, Array]:
    """All rays of the given keyframes that belong to given tracks (sorted) without a point, and those tracks (G,).

    `trusted_from`: the frame before which a track's rays do not count, where there is one.
    """
    since = trusted_from or {}
    first_frame = np.array([since.get(track, 0) for track in track_ids.tolist()])
    columns = []
    for keyframe_id in keyframe_ids:
        keyframe = world.keyframes[keyframe_id]
        view = keyframe.view
        rows = np.flatnonzero((keyframe.points < 0) & np.isin(view.ids, track_ids))
        rows = rows[view.index >= first_frame[np.searchsorted(track_ids, view.ids[rows])]]
        poses = keyframe.poses_at(view.dt_s[rows])
        columns.append((view.ids[rows], poses[:, :3, 3], poses[:, :3, :3], view.rays[rows], view.whitening[rows]))
    ids, centres, turns, rays, whitening = (np.concatenate(parts) for parts in zip(*columns, strict=True))
    order = np.argsort(ids, kind="stable")
    found, group = np.unique(ids[order], return_inverse=True)
    return Sightings(group, centres[order], turns[order], rays[order], whitening[order]), found


def grow(world: SparseMap, newest: Keyframe, trusted_from: dict[int, int], options: OdometryOptions) -> int:
    """Triangulate the newest keyframe's tracks that have no point, from keyframes of its segment; return how many.

    `trusted_from` as in `sightings_of`.
    """
    recent = [k.id for k in world.keyframes[-LOOK_BACK:] if k.segment == newest.segment]
    free = newest.view.ids[newest.points < 0]
    wanted = np.array(sorted(t for t in free.tolist() if trusted_from.get(t, 0) <= newest.view.index), dtype=np.int64)
    if not len(wanted) or len(recent) < 2:
        return 0
    seen, tracks = sightings_of(world, recent, wanted, trusted_from)
    result = triangulate(seen, np.deg2rad(options.triangulation_parallax_deg), options.inlier_sigma)
    found = tracks[result.accepted]
    since = np.array([trusted_from.get(track, 0) for track in found.tolist()])
    world.add_points(result.positions[result.accepted], found, newest.segment, since)
    for keyframe_id in recent:
        world.count_shared(world.keyframes[keyframe_id])
    return int(np.count_nonzero(result.accepted))


def take_back(world: SparseMap, adjusted: Adjusted, index: BundleIndex) -> None:
    """Put adjusted poses and points into the map."""
    for slot, keyframe_id in enumerate(index.keyframes.tolist()):
        world.keyframes[keyframe_id].world_from_camera = adjusted.poses[slot]
    world.positions[index.points] = adjusted.points


def cull(world: SparseMap, index: BundleIndex, pose_of: Array, point_of: Array, sigmas: Array, max_sigma: float) -> int:
    """Cut rays that do not fit from their points and drop points left with fewer than two; return how many rays."""
    bad = sigmas > max_sigma
    for slot in np.unique(pose_of[bad]):
        keyframe = world.keyframes[int(index.keyframes[slot])]
        keyframe.points[index.rows[bad & (pose_of == slot)]] = -1
    kept = np.bincount(point_of[~bad], minlength=len(index.points))
    world.drop_points(index.points[kept < 2])
    return int(np.count_nonzero(bad))


def adjust_around(world: SparseMap, newest: Keyframe, options: OdometryOptions) -> None:
    """Local bundle adjustment of the keyframes that share points with the newest, then drop what does not fit."""
    free, held = window(world, newest, options)
    points = np.unique(np.concatenate([world.keyframes[i].points for i in free]))
    points = points[points >= 0]
    if len(points) < options.min_inliers or not free:
        return
    bundle, index = assemble(world, [*held, *free], points, set(held))
    adjusted = adjust(bundle, iterations=6, relative_decrease=1e-3)
    take_back(world, adjusted, index)
    cull(world, index, bundle.pose_of, bundle.point_of, adjusted.sigmas, options.inlier_sigma)
