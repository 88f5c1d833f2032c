"""The shortest time between two events of a pixel: no refractory time can be longer."""

import numpy as np

from hybridtrack.calibration.kernels import shortest_intervals
from hybridtrack.calibration.views import View
from hybridtrack.recording import Recording

Array = np.ndarray

NEVER = np.iinfo(np.int64).max
LEAST_PIXELS = 100


def shortest_interval_ns(recording: Recording, views: list[View], shape: tuple[int, int]) -> float | None:
    """Median over pixels (of a grid of `shape`) of the shortest interval, ns; None where too few pixels fired often.

    A row-scanned readout delays the first event of a burst more than the second at times, and so shortens some: the
    number bounds the refractory time only as far as the readout kept up.
    """
    shortest, last = np.full(shape, NEVER), np.full(shape, np.iinfo(np.int64).min // 2)
    for view in views:
        for events in recording.event_blocks(view.t0_ns, view.t1_ns):
            shortest_intervals(events.t, events.x, events.y, last, shortest)
    # Pixels that took part in bursts; others know only background.
    fired = shortest[shortest < 3_000_000]
    return float(np.median(fired)) if len(fired) >= LEAST_PIXELS else None
