"""Choose and draw the frame that shows a tracker run best: many features followed, and in motion."""

import numpy as np

from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.report.page import Figure
from hybridtrack.report.track_page import picture_figure
from hybridtrack.tracking import Tracks

Array = np.ndarray

EVENT_WINDOW_NS = 6_000_000
FOLLOWED_SHARE = 0.8  # of the most features that any frame shows
CANDIDATES = 24


def busiest_frame(recording: Recording, middle_ns: Array, tracks: Tracks) -> int:
    """Of the frames that show nearly the most features, the one with the most events before it: there is motion."""
    stamps = np.sort(tracks.t_ns[tracks.with_state("alive")])
    counts = np.searchsorted(stamps, middle_ns) - np.searchsorted(stamps, middle_ns - 10_000_000)
    # Not the very first frames: there nothing has moved yet, and there is no path to draw.
    counts[: min(10, len(counts) // 2)] = 0
    candidates = np.flatnonzero(counts >= FOLLOWED_SHARE * counts.max())
    candidates = candidates[np.linspace(0, len(candidates) - 1, min(CANDIDATES, len(candidates))).astype(int)]
    moving = [
        recording.event_index(t_ns) - recording.event_index(t_ns - EVENT_WINDOW_NS)
        for t_ns in middle_ns[candidates].astype(np.int64).tolist()
    ]
    return int(candidates[np.argmax(moving)])


def picture_of_run(recording: Recording, module: HybridModule, tracks: Tracks, name: str = "tracks") -> Figure | None:
    """Tracks over the best frame of a recording, or None where there are no frames or no tracks."""
    if not len(recording.frames) or not len(tracks):
        return None
    timing = module.known_timing()
    starts = timing.exposure_start_ns(recording.frames.t_start_ns, 0.5 * module.frame_mode.height)
    middle = starts + 0.5 * timing.true_exposure_ns(recording.frames.exposure_ns)
    best = busiest_frame(recording, middle, tracks)
    t_ns = int(middle[best])
    events = recording.events(t_ns - EVENT_WINDOW_NS, t_ns)
    return picture_figure(module, tracks, recording.frame_image(best), t_ns, events, name)
