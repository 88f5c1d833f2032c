"""A recording pushed through the tracker as if it came live: how late updates are, and whether it keeps up.

Blocks of events and frames become ready at their own times on the recording's clock; the tracker takes them one after
the other, each at its measured working time. What falls behind waits in line, so that lateness grows without end where
the tracker is slower than the recording.
"""

import time
from dataclasses import dataclass

import numpy as np

from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.tracking import Points, Tracker, TrackerOptions
from hybridtrack.tracking.light_levels import frame_clock
from hybridtrack.tracking.offline import EventFeed

Array = np.ndarray
BLOCK_NS = 1_000_000


@dataclass(frozen=True)
class LiveReplay:
    """`realtime_factor`: seconds of recording a second of work (1 keeps up); `late_ms` 95th percentile over blocks and
    frames of the time from when it was ready to when its lines were out; `events_hz` mean load."""

    realtime_factor: float
    late_ms: float
    events_hz: float


def lateness(ready_s: Array, work_s: Array) -> Array:
    """Time (N,) from ready to done of jobs done in order by one worker; ready at `ready_s` (N,), ascending, and taking
    `work_s` (N,)."""
    free, late = -np.inf, np.empty(len(ready_s))
    for k, (ready, work) in enumerate(zip(ready_s, work_s, strict=True)):
        free = max(free, ready) + work
        late[k] = free - ready
    return late


def replay_live(recording: Recording, module: HybridModule, options: TrackerOptions, points: Points) -> LiveReplay:
    """Push a recording through a tracker in blocks of 1 ms. Kernels should have been compiled before.

    Raises what `track_recording` raises, and DegenerateDataError where there are no events or frames.
    """
    recording.require_events()
    recording.require_frames()
    tracker, feed, jobs = Tracker(module, options, points), EventFeed(recording), []
    begin, end = recording.event_span_ns
    frames = recording.frames
    for t0, t1 in recording.events_lost:
        tracker.push_lost_events(int(t0), int(t1))
    latency = float(module.known_timing().event_latency_ns or 0.0)
    index, now = 0, begin
    while now < end:
        now, due = now + BLOCK_NS, False
        if index < len(frames.t_start_ns):
            t_start, exposure = int(frames.t_start_ns[index]), int(frames.exposure_ns[index])
            read_out = frame_clock(module, t_start, exposure).span_ns[1] + latency
            due = read_out <= now
            now = int(read_out) if due else now
        blocks = list(feed.until(now))
        image = recording.frame_image(index) if due else None
        began = time.perf_counter()
        for block in blocks:
            tracker.push_events(block)
        if image is not None:
            tracker.push_frame(image, t_start, exposure)
            index += 1
        jobs.append((now * 1e-9, time.perf_counter() - began))
    ready_s, work_s = np.array(jobs).T
    span_s = (end - begin) * 1e-9
    late = lateness(ready_s - begin * 1e-9, work_s)
    return LiveReplay(
        span_s / float(work_s.sum()), 1e3 * float(np.percentile(late, 95)), recording.event_count / span_s
    )
