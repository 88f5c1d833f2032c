"""Choose and draw the frame that shows a tracker run best: the one with the most features followed."""

import numpy as np

from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.report.page import Figure
from hybridtrack.report.track_page import picture_figure
from hybridtrack.tracking import Tracks

EVENT_WINDOW_NS = 6_000_000


def picture_of_run(recording: Recording, module: HybridModule, tracks: Tracks, name: str = "tracks") -> Figure | None:
    """Tracks over the best frame of a recording, or None where there are no frames or no tracks."""
    if not len(recording.frames) or not len(tracks):
        return None
    timing = module.known_timing()
    starts = timing.exposure_start_ns(recording.frames.t_start_ns, 0.5 * module.frame_mode.height)
    middle = starts + 0.5 * timing.true_exposure_ns(recording.frames.exposure_ns)
    following = tracks.with_state("alive")
    stamps = np.sort(tracks.t_ns[following])
    window = 10_000_000
    counts = np.searchsorted(stamps, middle) - np.searchsorted(stamps, middle - window)
    # Not the very first frames: there nothing has moved yet, and there is no path to draw.
    counts[: min(10, len(counts) // 2)] = 0
    best = int(np.argmax(counts))
    t_ns = int(middle[best])
    events = recording.events(t_ns - EVENT_WINDOW_NS, t_ns)
    return picture_figure(module, tracks, recording.frame_image(best), t_ns, events, name)
