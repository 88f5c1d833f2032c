"""What odometry hands back: trajectory, map, graph and a summary, from a finished odometer."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from hybridtrack.odometry.closing import LoopVerdict
from hybridtrack.odometry.finishing import Finished
from hybridtrack.odometry.odometer import FrameState, Odometer
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.sparse_map import SparseMap
from hybridtrack.odometry.trajectory import LOST, OK, WEAK, Trajectory
from hybridtrack.posegraph import PoseGraph

Array = np.ndarray

WEAK_SHARE = 0.5
CONTAINS = (
    "noise of rays: of the frame's own against the map, and of the nearest keyframe's in the joint "
    "adjustment, grown by how much the rays of one track repeat their errors; for errors that remain after a "
    "similarity alignment of the positions. Not the lens, nor the clocks"
)


@dataclass(frozen=True, eq=False)
class MapPoints:
    """`positions` (P, 3) in the trajectory's frame; `segment` (P,) frame of reference; `rays` (P,) that see each; the
    view in the middle of those, `frame` (P,) index and `uv` (P, 2) colour px; `colours` (P, 3) RGB in 0..1."""

    positions: Array
    segment: Array
    rays: Array
    frame: Array
    uv: Array
    colours: Array


@dataclass(frozen=True, eq=False)
class OdometryResult:
    """Everything `write_outputs` writes. `failures` are sentences; with any, the command ends with exit code 1."""

    trajectory: Trajectory
    points: MapPoints
    graph: PoseGraph
    loops: list[LoopVerdict]
    summary: dict[str, Any]
    failures: list[str]


def health_of(frame: FrameState, options: OdometryOptions) -> str:
    """Health of one frame: by how many rays fit, and which share of those that should."""
    if frame.world_from_camera is None:
        return LOST
    return WEAK if frame.inliers < options.weak_inliers or frame.share < WEAK_SHARE else OK


def trajectory_of(frames: list[FrameState], world: SparseMap, options: OdometryOptions) -> Trajectory:
    """The trajectory of all frames; segments that were tied carry one number."""
    lost_pose, lost_covariance = np.full((4, 4), np.nan), np.full((6, 6), np.nan)
    found = [frame.world_from_camera is not None for frame in frames]
    return Trajectory(
        np.array([frame.view.t_ns for frame in frames], dtype=np.int64),
        np.array([lost_pose if f.world_from_camera is None else f.world_from_camera for f in frames]).reshape(-1, 4, 4),
        np.array([health_of(frame, options) for frame in frames], dtype="<U4"),
        np.array([world.frame_of(f.segment) if ok else -1 for f, ok in zip(frames, found, strict=True)], np.int64),
        np.array([lost_covariance if f.covariance is None else f.covariance for f in frames]).reshape(-1, 6, 6),
    )


def map_points(world: SparseMap) -> MapPoints:
    """All points in use, each with the middle one of the views that see it."""
    points = [k.points for k in world.keyframes]
    counts = [np.count_nonzero(p >= 0) for p in points]
    if not sum(counts):
        none = np.empty(0, np.int64)
        return MapPoints(np.empty((0, 3)), none, none, none, np.empty((0, 2)), np.empty((0, 3)))
    point = np.concatenate([p[p >= 0] for p in points])
    keyframe = np.repeat(np.arange(len(points)), counts)
    uv = np.concatenate([k.view.uv[k.points >= 0] for k in world.keyframes])
    order = np.argsort(point, kind="stable")
    used, start, rays = np.unique(point[order], return_index=True, return_counts=True)
    middle = order[start + rays // 2]
    seen_from = [world.keyframes[i] for i in keyframe[middle]]
    return MapPoints(
        world.positions[used],
        np.array([world.frame_of(k.segment) for k in seen_from]),
        rays,
        np.array([k.view.index for k in seen_from]),
        uv[middle],
        np.full((len(used), 3), 0.5),
    )


def _loop_summary(verdict: LoopVerdict) -> dict[str, Any]:
    return {
        "from": verdict.loop.from_id,
        "to": verdict.loop.to_id,
        "features": len(verdict.loop.to_rows),
        "used": verdict.used,
        "reason": verdict.reason,
        "gap_share_of_path": verdict.shift_share,
        "gap_turn_deg": verdict.turn_deg,
        "scale": verdict.scale,
        "chi_square": verdict.chi_square,
    }


def _failures(odometer: Odometer, trajectory: Trajectory) -> list[str]:
    if not odometer.segments:
        return [f"odometry could not start: {odometer.reason}"]
    failures = []
    lost = int(np.count_nonzero(~trajectory.found))
    if lost:
        failures.append(f"the pose is lost in {lost} of {len(trajectory)} frames")
    parts = len(np.unique(trajectory.segment[trajectory.found]))
    if parts > 1:
        failures.append(f"the trajectory falls into {parts} segments that nothing ties together")
    return failures


def _path_length(trajectory: Trajectory) -> float:
    total = 0.0
    for segment in np.unique(trajectory.segment[trajectory.found]):
        positions = trajectory.world_from_camera[trajectory.segment == segment, :3, 3]
        total += float(np.linalg.norm(np.diff(positions, axis=0), axis=1).sum())
    return total


def result_of(odometer: Odometer, finished: Finished) -> OdometryResult:
    """Collect the result of a finished odometer."""
    world, options = odometer.world, odometer.options
    trajectory = trajectory_of(odometer.frames, world, options)
    points = map_points(world)
    failures = _failures(odometer, trajectory)
    healths, counts = np.unique(trajectory.health, return_counts=True)
    inliers = [frame.inliers for frame in odometer.frames if frame.world_from_camera is not None]
    verdicts = finished.closing.verdicts
    summary = {
        "format": "hybridtrack-odometry-summary",
        "version": 1,
        "mode": options.mode,
        "frames": len(trajectory),
        "health": {name: int(count) for name, count in zip(healths.tolist(), counts.tolist(), strict=True)},
        "segments": len(np.unique(trajectory.segment[trajectory.found])),
        "keyframes": len(world.keyframes),
        "points": len(points.positions),
        "median_rays_a_frame": float(np.median(inliers)) if inliers else 0.0,
        "path_length": _path_length(trajectory),
        "scale": f"not observed; the median depth of the first map was set to {options.start_depth:g}",
        "residual_variance": [fit.variance for fit in finished.fits],
        "track_repetition": [fit.repetition for fit in finished.fits],
        "covariance_contains": CONTAINS,
        "loops": [_loop_summary(verdict) for verdict in verdicts],
        "loops_used": sum(verdict.used for verdict in verdicts),
        "findings": finished.findings,
        "failures": failures,
    }
    return OdometryResult(trajectory, points, finished.closing.graph, verdicts, summary, failures)
