"""Track a whole recording: the live tracker, fed in the order in which a module would deliver."""

from collections.abc import Callable, Iterator

import numpy as np

from hybridtrack.errors import ModuleMismatchError
from hybridtrack.module import HybridModule
from hybridtrack.recording import Events, Recording
from hybridtrack.tracking.light_levels import frame_clock
from hybridtrack.tracking.options import TrackerOptions
from hybridtrack.tracking.points_file import Points
from hybridtrack.tracking.tracker import Tracker
from hybridtrack.tracking.tracks_file import Tracks

Progress = Callable[[str, float], None]
BLOCK_EVENTS = 1 << 19


def _silent(stage: str, fraction: float) -> None:
    """Show no progress."""


def check_recording(recording: Recording, module: HybridModule, options: TrackerOptions) -> None:
    """Raise DegenerateDataError or ModuleMismatchError where a recording can't be tracked with this module and mode."""
    recording.require_frames()
    mode = module.frame_mode
    if recording.frames.shape[:2] != mode.shape:
        height, width = recording.frames.shape[:2]
        raise ModuleMismatchError(
            f"{recording.path}: frames must be {mode.width}x{mode.height} px as module '{module.name}' says, "
            f"got {width}x{height}"
        )
    if options.mode != "frames":
        recording.require_events()


class EventFeed:
    """Hands out a recording's events up to a given stamp, block by block."""

    def __init__(self, recording: Recording) -> None:
        self._blocks: Iterator[Events] = recording.event_blocks(size=BLOCK_EVENTS)
        self._held = Events.empty()

    def until(self, t_ns: float) -> Iterator[Events]:
        """Blocks of the events not handed out so far with stamps before `t_ns`."""
        while True:
            if not len(self._held):
                block = next(self._blocks, None)
                if block is None:
                    return
                self._held = block
            stop = int(np.searchsorted(self._held.t, t_ns))
            if stop:
                yield self._held[:stop]
            self._held = self._held[stop:]
            if len(self._held):
                return


def track_recording(
    recording: Recording,
    module: HybridModule,
    options: TrackerOptions | None = None,
    points: Points | None = None,
    progress: Progress = _silent,
) -> Tracks:
    """Track features through a recording; lines sorted by time, then id.

    With `points` these are followed under their own ids and no others. Raises NotCalibratedError where the module lacks
    what the mode needs, ModuleMismatchError where recording and module disagree, DegenerateDataError where frames or
    events are missing.
    """
    chosen = options or TrackerOptions()
    tracker = Tracker(module, chosen, points)
    check_recording(recording, module, chosen)
    latency = float(module.known_timing().event_latency_ns or 0.0)
    lost = recording.events_lost if chosen.mode != "frames" else np.empty((0, 2), np.int64)
    for t0, t1 in lost:
        tracker.push_lost_events(int(t0), int(t1))
    feed = EventFeed(recording) if chosen.mode != "frames" else None
    frames, parts = recording.frames, []
    order = np.argsort(frames.t_start_ns, kind="stable")
    for done, index in enumerate(order):
        t_start, exposure = int(frames.t_start_ns[index]), int(frames.exposure_ns[index])
        if feed is not None:
            end = frame_clock(module, t_start, exposure).span_ns[1] + latency
            parts += [tracker.push_events(block) for block in feed.until(end)]
        parts.append(tracker.push_frame(recording.frame_image(int(index)), t_start, exposure))
        progress("tracking", (done + 1) / len(order))
    if feed is not None:
        parts += [tracker.push_events(block) for block in feed.until(np.inf)]
    return Tracks.joined(parts).in_order()
