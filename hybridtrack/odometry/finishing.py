"""What can be done once all frames are known: adjust the whole map, close loops, localise every frame again.

Every frame, lost ones beside a segment included, is localised against the finished map with the twist that its
neighbours on both sides give. Its covariance adds two parts: its own rays against a map taken as known, and the nearest
keyframe's share of the joint covariance, carried over rigidly. Both are scaled by the residual variance of the map.
They hold for errors that remain after a similarity alignment of the positions, and contain the noise of independent
rays only: not the lens, not the clocks, not errors that one track repeats from frame to frame.
"""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from hybridtrack.geometry import se3
from hybridtrack.odometry.closing import Closing, close_loops, keyframe_graph, tie_segments
from hybridtrack.odometry.global_bundle import Fit, adjust_whole, balance_places, fit_of
from hybridtrack.odometry.localisation import refine_pose
from hybridtrack.odometry.motion import twists_along
from hybridtrack.odometry.observations import NS
from hybridtrack.odometry.odometer import FrameState, Odometer
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.sparse_map import SparseMap

Array = np.ndarray

TWIST_ROUNDS = 2
LONGEST_TWIST_GAP_S = 0.2


@dataclass(frozen=True, eq=False)
class Finished:
    """The finished map's graph and loop verdicts, one fit a frame of reference, and sentences on what was found."""

    closing: Closing
    fits: list[Fit]
    findings: list[str]


def _try_frame(
    world: SparseMap, frame: FrameState, segment: int, guess: Array, twist: Array, options: OdometryOptions
) -> bool:
    """Localise one frame in a segment's map from a guess (4, 4); false where it does not fit."""
    points = world.points_of(frame.view.ids, segment)
    rows = np.flatnonzero(points >= 0)
    if len(rows) < options.min_inliers:
        return False
    estimate = refine_pose(frame.view.select(rows), world.positions[points[rows]], guess, twist, options.inlier_sigma)
    wanted = max(options.min_inliers, options.min_inlier_share * len(rows))
    if estimate is None or estimate.inlier_count < wanted:
        return False
    frame.take(estimate, segment)
    return True


def update_twists(frames: list[FrameState], world: SparseMap) -> None:
    """Twists of all frames from the poses around them within their segment, and those of keyframes with them."""
    t_s = np.array([(f.view.t_ns - frames[0].view.t_ns) * NS for f in frames])
    for segment in sorted({f.segment for f in frames if f.segment >= 0}):
        poses = [f.world_from_camera if f.segment == segment else None for f in frames]
        for frame, pose, twist in zip(frames, poses, twists_along(t_s, poses, LONGEST_TWIST_GAP_S), strict=True):
            if pose is not None:
                frame.twist = twist
    by_index = {f.view.index: f for f in frames}
    for keyframe in world.keyframes:
        frame = by_index[keyframe.view.index]
        if frame.segment == keyframe.segment and frame.twist is not None:
            keyframe.twist = frame.twist


def follow_keyframes(frames: list[FrameState], world: SparseMap, before: dict[int, Array]) -> None:
    """Move frames as their nearest keyframes moved; `before`: keyframe poses (4, 4) by id when the frames fitted."""
    for frame in frames:
        if frame.world_from_camera is not None:
            keyframe = world.nearest_keyframe(frame.view.t_ns, frame.segment)
            moved = keyframe.world_from_camera @ se3.inverse(before[keyframe.id])
            frame.world_from_camera = moved @ frame.world_from_camera


def _extend(frames: Iterable[FrameState], world: SparseMap, options: OdometryOptions) -> None:
    """Localise lost frames next to found ones, going through `frames` in the order given."""
    before: FrameState | None = None
    for frame in frames:
        if frame.world_from_camera is None and before is not None:
            assert before.world_from_camera is not None
            assert before.twist is not None
            dt_s = (frame.view.t_ns - before.view.t_ns) * NS
            guess = before.world_from_camera @ se3.exp(dt_s * before.twist)
            _try_frame(world, frame, before.segment, guess, before.twist, options)
        before = frame if frame.world_from_camera is not None else None


def localise_all(frames: list[FrameState], world: SparseMap, options: OdometryOptions) -> None:
    """Localise every frame against the map as it stands; a frame that does not fit is lost."""
    for frame in frames:
        if frame.world_from_camera is not None and frame.twist is not None:
            guess, frame.world_from_camera = frame.world_from_camera, None
            _try_frame(world, frame, frame.segment, guess, frame.twist, options)
    _extend(frames, world, options)
    _extend(reversed(frames), world, options)
    for frame in frames:
        if frame.world_from_camera is None:
            frame.segment, frame.inliers, frame.share, frame.covariance = -1, 0, 0.0, None


def add_map_covariance(frames: list[FrameState], world: SparseMap, fits: list[Fit]) -> None:
    """Scale each frame's covariance by the map's residual variance and add its nearest keyframe's."""
    fit_of_keyframe = {i: fit for fit in fits for i in fit.ids}
    for frame in frames:
        if frame.world_from_camera is None or frame.covariance is None:
            continue
        keyframe = world.nearest_keyframe(frame.view.t_ns, frame.segment)
        fit = fit_of_keyframe.get(keyframe.id)
        if fit is None:
            frame.covariance = None
            continue
        frame.covariance = fit.variance * frame.covariance
        if fit.joint is not None:
            place = 6 * fit.ids.index(keyframe.id)
            carried = se3.adjoint(se3.inverse(frame.world_from_camera) @ keyframe.world_from_camera)
            frame.covariance = frame.covariance + carried @ fit.joint[place : place + 6, place : place + 6] @ carried.T


def finish(odometer: Odometer) -> Finished:
    """Finish the odometer's map and the poses of all its frames, in place."""
    world, frames, options = odometer.world, odometer.frames, odometer.options
    findings = list(odometer.findings)
    poses_then = {k.id: k.world_from_camera for k in world.keyframes}
    update_twists(frames, world)
    adjust_whole(world, options)
    fits = [fit for ids in world.groups() if (fit := fit_of(world, ids, options)) is not None]
    closing = Closing(keyframe_graph(world, fits), [])
    if odometer.book is not None and odometer.loops:
        findings += tie_segments(world, odometer.loops)
        closing = close_loops(world, odometer.book, odometer.loops, fits, options)
        adjust_whole(world, options)
        balance_places(world)
        adjust_whole(world, options, rounds=1)
    follow_keyframes(frames, world, poses_then)
    for _ in range(TWIST_ROUNDS):
        localise_all(frames, world, options)
        update_twists(frames, world)
        adjust_whole(world, options, rounds=1)
    fits = [fit for ids in world.groups() if (fit := fit_of(world, ids, options)) is not None]
    localise_all(frames, world, options)
    add_map_covariance(frames, world, fits)
    graph = closing.graph.with_solution(
        np.array([k.world_from_camera for k in world.keyframes]).reshape(-1, 4, 4), closing.graph.constraints
    )
    return Finished(Closing(graph, closing.verdicts), fits, findings)
