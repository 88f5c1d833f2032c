"""The odometer: one view at a time, from nothing to poses and a map.

States: *starting* (no map yet, views are kept until two of them have parallax), *running* (every view is localised in
the map, some become keyframes), *lost* (the view fits nowhere). While lost the odometer does two things at once: it
looks for the place among all keyframes, and it starts a new segment from the views since. Whichever comes first ends
the loss; a segment that was started afresh is tied to the others only by a loop, later.
"""

from collections import Counter
from dataclasses import dataclass, field

import numpy as np

from hybridtrack.geometry import se3
from hybridtrack.odometry.association import associate, known_points
from hybridtrack.odometry.keyframes import wants_keyframe
from hybridtrack.odometry.localisation import Approach, PoseEstimate, localise, refine_pose
from hybridtrack.odometry.loops import Loop, Sighting, find_loop, locate
from hybridtrack.odometry.mapping import adjust_around, grow
from hybridtrack.odometry.motion import twist_between
from hybridtrack.odometry.observations import NS, View
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.places import EVERY, Look, PlaceBook
from hybridtrack.odometry.sparse_map import Keyframe, SparseMap
from hybridtrack.odometry.startup import start_map

Array = np.ndarray

STARTING, RUNNING, LOST = "starting", "running", "lost"
STRIKES = 3
NEVER = 1 << 62
FRAMES_PER_SEARCH = 5
KEPT_VIEWS = 400
KEYFRAMES_BETWEEN_LOOPS = 4


@dataclass(eq=False)
class FrameState:
    """What is known of one frame: its view, pose (4, 4) and twist (6,) or None, segment or -1, inliers, covariance (6,
    6) per unit variance, and its share of inliers."""

    view: View
    world_from_camera: Array | None = None
    twist: Array | None = None
    segment: int = -1
    inliers: int = 0
    share: float = 0.0
    covariance: Array | None = None
    sigmas: Array = field(default_factory=lambda: np.empty(0))

    def take(self, estimate: PoseEstimate, segment: int) -> None:
        """Take over an estimate."""
        self.world_from_camera, self.twist, self.segment = estimate.world_from_camera, estimate.twist, segment
        self.inliers, self.covariance = estimate.inlier_count, estimate.covariance
        self.share = estimate.inlier_count / max(len(estimate.inliers), 1)
        self.sigmas = estimate.sigmas[estimate.inliers]


class Odometer:
    """Push views in time order; read `state`, `frames`, `world` and `loops`.

    `look(frame)` gives the features of a frame's picture, for places; None does without, so that no loop closes and a
    loss always starts a new segment. `width_px`: of the colour array.
    """

    def __init__(self, width_px: int, options: OdometryOptions, look: Look | None = None) -> None:
        self.options, self.width_px = options, width_px
        self.world = SparseMap()
        self.book = None if look is None else PlaceBook(self.world, look)
        self.frames: list[FrameState] = []
        self.loops: list[Loop] = []
        self.findings: list[str] = []
        self.state = STARTING
        self.reason = "no views yet"
        self.segments = 0
        self._waiting: list[View] = []
        self._strikes: Counter[int] = Counter()
        self._trusted_from: dict[int, int] = {}
        self._lost_since = 0

    def push(self, view: View) -> str:
        """Take the next frame's view and return the state after it."""
        frame = FrameState(view)
        self.frames.append(frame)
        if self.state == RUNNING and not self._follow(frame):
            self.state = LOST
            self._lost_since = len(self.frames) - 1
            self._waiting.clear()
        if self.state != RUNNING:
            self._wait(frame)
        return self.state

    def _approach(self) -> tuple[Array | None, Approach | None]:
        """Predicted pose of the newest frame and where the camera comes from, by the frame before."""
        if len(self.frames) < 2:
            return None, None
        now, before = self.frames[-1].view, self.frames[-2]
        if before.world_from_camera is None or before.twist is None:
            return None, None
        dt_s = (now.t_ns - before.view.t_ns) * NS
        guess = before.world_from_camera @ se3.exp(dt_s * before.twist)
        return guess, Approach(before.world_from_camera, dt_s)

    def _follow(self, frame: FrameState) -> bool:
        """Localise the newest frame by its tracks; false where it fits nowhere."""
        segment = self.segments - 1
        points = self.world.points_of(frame.view.ids, segment)
        rows = np.flatnonzero(points >= 0)
        guess, approach = self._approach()
        seen = frame.view.select(rows)
        estimate = localise(seen, self.world.positions[points[rows]], guess, approach, self.options)
        if estimate is None:
            return False
        frame.take(estimate, segment)
        self._strike(seen.ids, estimate.inliers, segment)
        last = self.world.keyframes[-1]
        if wants_keyframe(last, frame.view, estimate.inlier_count, self.width_px, self.options):
            self._insert(frame)
        return True

    def _strike(self, ids: Array, inliers: Array, segment: int) -> None:
        """Part tracks from their points that did not fit several frames in a row."""
        for track, fits in zip(ids.tolist(), inliers.tolist(), strict=True):
            self._strikes[track] = 0 if fits else self._strikes[track] + 1
        out = [track for track in ids.tolist() if self._strikes[track] >= STRIKES]
        for track in out:
            # What it follows from here on may be a point too, but another one; the second time it is not believed.
            again = track in self._trusted_from
            self._trusted_from[track] = NEVER if again else self.frames[-1].view.index
            self._strikes[track] = 0
        self.world.cut_tracks(np.array(out, dtype=np.int64), segment)

    def _insert(self, frame: FrameState) -> None:
        """Make the newest frame a keyframe and grow the map by it."""
        assert frame.world_from_camera is not None
        assert frame.twist is not None
        newest = self.world.add_keyframe(frame.view, frame.world_from_camera, frame.twist, frame.segment)
        grow(self.world, newest, self._trusted_from, self.options)
        adjust_around(self.world, newest, self.options)
        frame.world_from_camera = newest.world_from_camera
        self._look_for_loop(newest)

    def _look_for_loop(self, newest: Keyframe) -> None:
        """Look whether the newest keyframe, if it is a place, was seen before; not right after the last loop."""
        rested = not self.loops or newest.id - self.loops[-1].to_id >= KEYFRAMES_BETWEEN_LOOPS
        if self.book is None or newest.id % EVERY or not rested:
            return
        loop = find_loop(self.book, self.world, newest, self.options)
        if loop is not None:
            self.loops.append(loop)

    def _wait(self, frame: FrameState) -> None:
        """While starting or lost: find the place again, or start a new segment."""
        if self.state == LOST and self._relocalise(frame):
            return
        self._waiting.append(frame.view)
        while self._too_old():
            self._waiting.pop(0)
        if len(self._waiting) < 3 or not self._moved():
            return
        start = start_map(self._waiting, self.segments, self.options)
        self.reason = start.reason
        if start.world is not None:
            self._begin(start.world)

    def _too_old(self) -> bool:
        """Whether the oldest waiting view shares too little with the newest, or waited too long."""
        first, last = self._waiting[0], self._waiting[-1]
        if last is first:
            return False
        waited = (last.t_ns - first.t_ns) * NS
        shared = len(np.intersect1d(first.ids, last.ids, assume_unique=True))
        wanted = max(self.options.start_min_tracks, 0.3 * len(last))
        return waited > self.options.start_max_wait_s or len(self._waiting) > KEPT_VIEWS or shared < wanted

    def _moved(self) -> bool:
        """Whether the picture moved enough since the oldest waiting view for an attempt to be worth its time."""
        first, last = self._waiting[0], self._waiting[-1]
        _, a, b = np.intersect1d(first.ids, last.ids, assume_unique=True, return_indices=True)
        if len(a) < self.options.start_min_tracks:
            self.reason = f"{len(a)} tracks span the views, at least {self.options.start_min_tracks} are needed"
            return False
        moved = np.linalg.norm(last.rays_at_frame[b] - first.rays_at_frame[a], axis=1)
        if np.median(moved) < np.deg2rad(self.options.start_parallax_deg):
            self.reason = (
                f"the picture moved by {np.rad2deg(np.median(moved)):.1f} degrees, at least "
                f"{self.options.start_parallax_deg:.1f} are needed"
            )
            return False
        return True

    def _begin(self, fresh: SparseMap) -> None:
        """Take a fresh map as a new segment and localise the views that waited in it."""
        segment = self.segments
        self.segments += 1
        self.world.adopt(fresh, segment)
        self._strikes.clear()
        self._trusted_from.clear()
        own = {k.view.index: k for k in self.world.keyframes if k.segment == segment}
        index_of = {f.view.index: f for f in self.frames[-len(self._waiting) - 1 :]}
        nearest = self.world.keyframes[-len(own)]
        for view in self._waiting:
            frame = index_of[view.index]
            nearest = own.get(view.index, nearest)
            guess = nearest.world_from_camera @ se3.exp((view.t_ns - nearest.view.t_ns) * NS * nearest.twist)
            points = self.world.points_of(view.ids, segment)
            rows = np.flatnonzero(points >= 0)
            if len(rows) < self.options.min_inliers:
                continue
            positions = self.world.positions[points[rows]]
            estimate = refine_pose(view.select(rows), positions, guess, nearest.twist, self.options.inlier_sigma)
            if estimate is not None and estimate.inlier_count >= self.options.min_inliers:
                frame.take(estimate, segment)
        self._waiting.clear()
        if self.frames[-1].world_from_camera is not None:
            self.state = RUNNING
            self._twist_from_before()

    def _twist_from_before(self) -> None:
        """Give the newest frame the twist from the frame before, where both have poses."""
        now, before = self.frames[-1], self.frames[-2]
        if before.world_from_camera is not None and now.world_from_camera is not None:
            dt_s = (now.view.t_ns - before.view.t_ns) * NS
            now.twist = twist_between(before.world_from_camera, now.world_from_camera, dt_s)

    def _relocalise(self, frame: FrameState) -> bool:
        """Look for a lost frame: by tracks that are still there, every few frames by the look of its picture."""
        segment = self.segments - 1
        points = self.world.points_of(frame.view.ids, segment)
        rows = np.flatnonzero(points >= 0)
        positions = self.world.positions[points[rows]]
        estimate = localise(frame.view.select(rows), positions, None, None, self.options)
        if estimate is not None and estimate.inlier_count >= self.options.weak_inliers:
            return self._resume(frame, estimate, segment)
        if self.book is None or (len(self.frames) - 1 - self._lost_since) % FRAMES_PER_SEARCH:
            return False
        place = self.book.look(frame.view.index)
        among = [k for k in self.world.keyframes[::EVERY] if k.segment == segment]
        seen = None if place is None else locate(self.book, place, None, among, self.options)
        return seen is not None and self._resume_at(frame, seen, segment)

    def _resume_at(self, frame: FrameState, seen: Sighting, segment: int) -> bool:
        """Go on where a picture was recognised, if enough of the frame's tracks look at points known there."""
        around = [seen.keyframe.id, *self.world.neighbours(seen.keyframe, 4)]
        points = known_points(self.world, around)
        pose = seen.estimate.world_from_camera
        rows, looked_at = associate(self.world, frame.view.at_frame_time(), pose, points)
        positions = self.world.positions[looked_at]
        estimate = localise(frame.view.select(rows), positions, pose, None, self.options)
        if estimate is None or estimate.inlier_count < self.options.weak_inliers:
            return False
        good = estimate.inliers
        self.world.give_points(frame.view.ids[rows[good]], looked_at[good], segment)
        return self._resume(frame, estimate, segment)

    def _resume(self, frame: FrameState, estimate: PoseEstimate, segment: int) -> bool:
        """Go on in a segment from a frame that was found again; the next, whose twist is known, may be a keyframe."""
        frame.take(estimate, segment)
        self._waiting.clear()
        self.state = RUNNING
        return True
