"""The frozen baseline that tracking is measured against: pyramidal Lucas-Kanade on the module's frames alone.

Window 21 px, 4 levels, from frame to frame without prediction or template; a feature ends where forward and backward
differ by more than 1 frame px (Bouguet 2001, OpenCV's implementation). Nothing here may be tuned.
"""

from collections.abc import Callable
from typing import Any

import cv2
import numpy as np

from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.tracking import Points, Tracks
from hybridtrack.tracking.frame_step import eight_bit
from hybridtrack.tracking.light_levels import frame_clock
from hybridtrack.tracking.track_state import ALIVE, FROM_FRAME, NONE

Array = np.ndarray
Progress = Callable[[str, float], None]
WINDOW_PX, LEVELS, FORWARD_BACKWARD_PX = 21, 4, 1.0
SIGMA_PX = 0.3  # stated with every position, frame px: the method has no covariance of its own


def _silent(stage: str, fraction: float) -> None:
    """Show no progress."""


def flow_step(before: Array, after: Array, points: Array) -> tuple[Array, Array]:
    """Where `points` (N, 2), frame px, of one 8-bit picture are in the next, and which pass the gate (N,)."""
    if not len(points):
        return np.empty((0, 2)), np.empty(0, bool)
    start = points.astype(np.float32).reshape(-1, 1, 2)
    flow: Any = cv2.calcOpticalFlowPyrLK  # its stub allows no array of points
    size, top = (WINDOW_PX, WINDOW_PX), LEVELS - 1
    found, ahead, _ = flow(before, after, start, None, winSize=size, maxLevel=top)
    back, behind, _ = flow(after, before, found, None, winSize=size, maxLevel=top)
    error = np.linalg.norm((back - start).reshape(-1, 2), axis=1)
    return found.reshape(-1, 2).astype(float), (ahead.ravel() > 0) & (behind.ravel() > 0) & (
        error <= FORWARD_BACKWARD_PX
    )


def track_baseline(recording: Recording, module: HybridModule, points: Points, progress: Progress = _silent) -> Tracks:
    """Follow `points` from the first frame after their stamps; lines in colour px at mid-exposure of the rows.

    A feature's lines end at the frame that loses it. Raises DegenerateDataError without frames, NotCalibratedError
    without clocks.
    """
    recording.require_frames()
    mode, frames = module.frame_mode, recording.frames
    position = mode.frame_from_colour(points.uv)
    waiting, alive = np.ones(len(points), bool), np.zeros(len(points), bool)
    parts: list[Tracks] = []
    before: Array | None = None
    for done, index in enumerate(np.argsort(frames.t_start_ns, kind="stable")):
        picture = eight_bit(recording.frame_image(int(index)), mode.white_dn)
        clock = frame_clock(module, int(frames.t_start_ns[index]), int(frames.exposure_ns[index]))
        held = np.flatnonzero(alive)
        if before is not None and len(held):
            position[held], good = flow_step(before, picture, position[held])
            size = np.array([mode.width, mode.height])
            alive[held] = good & np.all((position[held] > -0.5) & (position[held] < size - 0.5), axis=1)
        begin = waiting & (points.t_ns <= clock.middle_ns(position[:, 1]) + 50_000)
        alive |= begin
        waiting &= ~begin
        parts.append(_lines(points.id, position, alive, clock.middle_ns(position[:, 1]), mode.binning, module))
        before = picture
        progress("baseline", (done + 1) / len(frames))
    return Tracks.joined(parts).in_order()


def _lines(ids: Array, position: Array, alive: Array, t_ns: Array, binning: int, module: HybridModule) -> Tracks:
    chosen = np.flatnonzero(alive)
    cov = np.tile(np.array([1.0, 0.0, 1.0], np.float32) * np.float32((SIGMA_PX * binning) ** 2), (len(chosen), 1))
    state, reason, source = (np.full(len(chosen), code, np.uint8) for code in (ALIVE, NONE, FROM_FRAME))
    uv = module.frame_mode.colour_from_frame(position[chosen])
    return Tracks(ids[chosen], t_ns[chosen], uv, cov, state, reason, source)
