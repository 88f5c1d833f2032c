"""A planar scene's events and frames in the order of delivery, trackers run over them, and how far they are off."""

from collections.abc import Callable
from dataclasses import dataclass

import cv2
import numpy as np
from planar_scene import PlanarScene

from hybridtrack.recording import Events
from hybridtrack.tracking import Points, Tracker, TrackerOptions, Tracks
from hybridtrack.tracking.light_levels import frame_clock

Array = np.ndarray
PERIOD_NS, FIRST_NS = 16_666_667, 2_000_000


def sway(peak_px_s: float, hz: float = 2.0) -> Callable[[float], Array]:
    """Sideways swing of the given top speed, with a little of it upright."""
    amplitude = peak_px_s / (2 * np.pi * hz)
    return lambda t: amplitude * np.array([np.sin(2 * np.pi * hz * t), 0.3 * np.sin(2.6 * np.pi * hz * t)])


@dataclass
class Ride:
    """`frames` as (start, picture), the events before each frame's end, and points to follow from the first one."""

    scene: PlanarScene
    exposure_ns: int
    frames: list[tuple[int, Array]]
    events: list[Events]
    points: Points

    @staticmethod
    def of(scene: PlanarScene, duration_s: float, exposure_ns: int = 4_000_000) -> "Ride":
        """Make the ride; events are sampled finely enough for its speed."""
        module = scene.module
        probe = np.array([scene.motion(t) for t in np.linspace(0, duration_s, 200)])
        speed = np.linalg.norm(np.diff(probe, axis=0), axis=1).max() / (duration_s / 199)
        step = int(np.clip(0.5 / max(speed, 1.0) * 1e9, 50_000, 500_000))
        frames, events, now = [], [], 0
        start = FIRST_NS
        while frame_clock(module, start, exposure_ns).span_ns[1] < duration_s * 1e9:
            end = frame_clock(module, start, exposure_ns).span_ns[1]
            stop = now + ((end - now) // step + 1) * step
            events.append(scene.events(now, stop, step))
            frames.append((start, scene.frame(start, exposure_ns)))
            now, start = stop, start + PERIOD_NS
        return Ride(scene, exposure_ns, frames, events, corner_points(scene, frames[0], exposure_ns))

    def run(self, mode: str = "hybrid", points: Points | None = None, pieces: int = 1, **options: object) -> Tracks:
        """Track the ride; events come in `pieces` between frames. `points` None: the ride's."""
        chosen = TrackerOptions(mode=mode, **options)  # type: ignore[arg-type]
        return self.feed(Tracker(self.scene.module, chosen, self.points if points is None else points), pieces)

    def feed(self, tracker: Tracker, pieces: int = 1) -> Tracks:
        """Push everything; return all lines in order."""
        parts = []
        for (start, picture), events in zip(self.frames, self.events, strict=True):
            for piece in np.array_split(np.arange(len(events)), pieces):
                parts.append(tracker.push_events(events[piece]))
            parts.append(tracker.push_frame(picture, start, self.exposure_ns))
        return Tracks.joined(parts).in_order()

    def errors(self, tracks: Tracks) -> Array:
        """Vector errors (N, 2) of lines of the ride's points, colour px."""
        start = self.points.uv[tracks.id]
        return tracks.uv - self.scene.carried(start, self.points.t_ns[tracks.id], tracks.t_ns)

    def in_sight(self, margin: float = 24.0) -> Array:
        """Ids of the points that stay inside the picture by `margin`."""
        size = np.array([self.scene.module.colour_array.width, self.scene.module.colour_array.height])
        ids = np.arange(len(self.points))
        inside = np.ones(len(ids), bool)
        for start, _ in self.frames:
            at = self.scene.carried(self.points.uv, self.points.t_ns, np.full(len(ids), start))
            inside &= np.all((at > margin) & (at < size - margin), axis=1)
        return ids[inside]

    def survival(self, tracks: Tracks) -> float:
        """Share of the points in sight that keep within 5 px up to the last frame and are never lost."""
        distance = np.linalg.norm(self.errors(tracks), axis=1)
        lost = tracks.with_state("lost")
        kept = []
        for identity in self.in_sight():
            mine = tracks.id == identity
            whole = mine.any() and tracks.t_ns[mine].max() >= self.frames[-1][0]
            kept.append(bool(whole and not lost[mine].any() and distance[mine].max() < 5.0))
        return float(np.mean(kept))


def corner_points(scene: PlanarScene, first: tuple[int, Array], exposure_ns: int) -> Points:
    """Up to 30 corners of the first frame, each stamped with the middle of its row's exposure."""
    start, picture = first
    found = cv2.goodFeaturesToTrack(picture, 30, 0.05, 12)[:, 0].astype(float)
    size = np.array(picture.shape[::-1])
    found = found[np.all((found > 16) & (found < size - 17), axis=1)]
    t_ns = frame_clock(scene.module, start, exposure_ns).middle_ns(found[:, 1])
    return Points(np.arange(len(found)), t_ns, scene.module.frame_mode.colour_from_frame(found))
