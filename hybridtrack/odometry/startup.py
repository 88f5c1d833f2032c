"""The first map of a segment: from views alone, or a reason why not yet.

Every candidate motion between the oldest view and the newest makes a small map of its own with two views in between,
adjusted as a bundle at the rays' own times. The candidate that explains all rays best wins, and only if it wins
clearly: a plane seen twice has two explanations, and a camera that only turns has none. The gates, in order: tracks
shared, motion that no rotation explains, angles at which rays meet, and the lead over the second candidate.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from hybridtrack.geometry import se3, sim3
from hybridtrack.odometry.bundle import adjust
from hybridtrack.odometry.localisation import refine_pose
from hybridtrack.odometry.mapping import sightings_of, take_back
from hybridtrack.odometry.motion import twist_between
from hybridtrack.odometry.observations import NS, View
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.sparse_map import SparseMap, assemble
from hybridtrack.odometry.triangulation import triangulate
from hybridtrack.odometry.two_views import candidate_motions, shared_rows, sigma_from_rotation

Array = np.ndarray

ROTATION_EXPLAINS_BELOW = 4.0
LOSS_CAP = 16.0
CLEAR_LEAD = 25.0
SAME_TURN_RAD = 0.02
SAME_DIRECTION_RAD = 0.1


@dataclass(frozen=True, eq=False)
class Start:
    """A first map, or None and the `reason`, a sentence without a full stop."""

    world: SparseMap | None
    reason: str
    parallax_deg: float = 0.0


@dataclass(frozen=True, eq=False)
class _Trial:
    """A candidate's map, its cost over all shared rays, and the median angle of its rays."""

    world: SparseMap
    cost: float
    accepted: int
    parallax_rad: float


def _with_poses(views: Sequence[View], last_from_first: Array, segment: int) -> SparseMap:
    """A map of the views at constant velocity along a motion with unit baseline, without points."""
    world = SparseMap()
    first_from_last = se3.inverse(last_from_first)
    span = (views[-1].t_ns - views[0].t_ns) * NS
    twist = twist_between(np.eye(4), first_from_last, span)
    for view in views:
        pose = se3.exp((view.t_ns - views[0].t_ns) * NS * twist)
        world.add_keyframe(view, pose, twist, segment)
    return world


def _adjust_all(world: SparseMap, iterations: int) -> Array:
    """Bundle adjustment of everything with the first pose held; residual deviations (M,)."""
    points = np.flatnonzero(world.alive)
    bundle, index = assemble(world, [k.id for k in world.keyframes], points, {0})
    adjusted = adjust(bundle, iterations)
    take_back(world, adjusted, index)
    for keyframe, other in zip(world.keyframes, [*world.keyframes[1:], world.keyframes[-2]], strict=True):
        dt_s = (other.view.t_ns - keyframe.view.t_ns) * NS
        keyframe.twist = twist_between(keyframe.world_from_camera, other.world_from_camera, dt_s)
    return adjusted.sigmas


def _tried(
    views: Sequence[View], motion: Array, tracks: Array, segment: int, options: OdometryOptions
) -> _Trial | None:
    """Build, adjust and score the map of one candidate; None where hardly anything lies ahead of both cameras."""
    world = _with_poses(views, motion, segment)
    ends = [0, len(views) - 1]
    seen, ids = sightings_of(world, ends, tracks)
    result = triangulate(seen, np.deg2rad(0.2), 3.0 * options.inlier_sigma)
    if np.count_nonzero(result.accepted) < max(options.min_inliers, 0.4 * len(tracks)):
        return None
    world.add_points(result.positions[result.accepted], ids[result.accepted], segment)
    for keyframe in world.keyframes[1:-1]:
        rows = np.flatnonzero(keyframe.points >= 0)
        if len(rows) < options.min_inliers:
            return None
        seen_now, points = keyframe.view.select(rows), world.positions[keyframe.points[rows]]
        estimate = refine_pose(seen_now, points, keyframe.world_from_camera, keyframe.twist, options.inlier_sigma)
        if estimate is not None:
            keyframe.world_from_camera = estimate.world_from_camera
    _adjust_all(world, 10)
    sigmas = _adjust_all(world, 15)
    rays = sum(int(np.isin(view.ids, tracks).sum()) for view in views)
    cost = float(np.minimum(sigmas**2, LOSS_CAP).sum()) + LOSS_CAP * (rays - len(sigmas))
    return _Trial(world, cost, int(np.count_nonzero(result.accepted)), float(np.median(_angles(world))))


def _angles(world: SparseMap) -> Array:
    """Angle (P,) under which each point sees the first and the last pose."""
    points = world.positions[world.alive]
    to_ends = [points - world.keyframes[i].world_from_camera[:3, 3] for i in (0, -1)]
    sine = np.linalg.norm(np.cross(*to_ends), axis=1)
    return np.arctan2(sine, np.einsum("ij,ij->i", *to_ends))


def _same_motion(a: _Trial, b: _Trial) -> bool:
    """Whether two trials ended in the same motion, up to scale."""
    pose_a, pose_b = (trial.world.keyframes[-1].world_from_camera for trial in (a, b))
    turn = np.linalg.norm(se3.log(se3.inverse(pose_a) @ pose_b)[3:])
    unit_a, unit_b = (pose[:3, 3] / max(np.linalg.norm(pose[:3, 3]), 1e-12) for pose in (pose_a, pose_b))
    return bool(turn < SAME_TURN_RAD and np.arccos(np.clip(unit_a @ unit_b, -1, 1)) < SAME_DIRECTION_RAD)


def _cleaned(world: SparseMap, options: OdometryOptions) -> None:
    """Drop points whose rays meet at too small an angle or do not fit, and set the scale by the first view's depths."""
    angles = np.zeros(len(world.positions))
    angles[world.alive] = _angles(world)
    world.drop_points(np.flatnonzero(world.alive & (angles < np.deg2rad(options.triangulation_parallax_deg))))
    for _ in range(2):
        points = np.flatnonzero(world.alive)
        bundle, index = assemble(world, [k.id for k in world.keyframes], points, {0})
        adjusted = adjust(bundle)
        take_back(world, adjusted, index)
        bad = np.unique(bundle.point_of[adjusted.sigmas > options.inlier_sigma])
        world.drop_points(index.points[bad])
    depth = float(
        np.median(se3.transform(se3.inverse(world.keyframes[0].world_from_camera), world.positions[world.alive])[:, 2])
    )
    growth = sim3.compose(options.start_depth / max(abs(depth), 1e-12), np.eye(3), np.zeros(3))
    world.transform([k.id for k in world.keyframes], growth)


def start_map(views: Sequence[View], segment: int, options: OdometryOptions) -> Start:
    """Try to make the first map of a segment from views in time order (the oldest is the origin)."""
    first, last = views[0], views[-1]
    rows_first, _ = shared_rows(first, last)
    if len(rows_first) < options.start_min_tracks:
        return Start(None, f"{len(rows_first)} tracks span the views, at least {options.start_min_tracks} are needed")
    beyond = sigma_from_rotation(first, last)
    if beyond < ROTATION_EXPLAINS_BELOW:
        return Start(
            None,
            f"a rotation alone explains the motion of the picture to {beyond:.1f} standard deviations, so that no "
            f"depth can be seen (at least {ROTATION_EXPLAINS_BELOW:.0f} are needed)",
        )
    chosen = [views[i] for i in sorted({round(s * (len(views) - 1)) for s in (0.0, 1 / 3, 2 / 3, 1.0)})]
    tracks = np.sort(first.ids[rows_first])
    motions = candidate_motions(first, last, options.seed)
    trials = [_tried(chosen, motion, tracks, segment, options) for motion in motions]
    found = sorted((trial for trial in trials if trial is not None), key=lambda trial: trial.cost)
    if not found:
        return Start(None, "no motion puts most of the tracks ahead of both cameras")
    best = found[0]
    parallax_deg = float(np.rad2deg(best.parallax_rad))
    if parallax_deg < options.start_parallax_deg:
        return Start(
            None,
            f"rays meet at {parallax_deg:.1f} degrees in the median, "
            f"at least {options.start_parallax_deg:.1f} are needed",
            parallax_deg,
        )
    others = [trial for trial in found[1:] if not _same_motion(best, trial)]
    if others and others[0].cost - best.cost < CLEAR_LEAD:
        return Start(
            None, "two motions explain the tracks equally well, as in a plane seen from few sides", parallax_deg
        )
    _cleaned(best.world, options)
    if best.world.point_count < options.start_min_tracks:
        return Start(
            None,
            f"{best.world.point_count} points are certain enough, at least {options.start_min_tracks} are needed",
            parallax_deg,
        )
    return Start(best.world, "", parallax_deg)
