"""Row skew: how far apart the stamps of neighbouring rows are while the readout is busy.

A row scan goes from row to row and spends a while in each, the longer the more events it holds. Right after a flip all
rows have events, so that successive reads are of neighbouring rows; what lies between their stamps is the skew at that
load. A readout that stamps each event by itself, or arbitrates without order, has none: its successive rows are not
neighbours.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.latency_kernels import row_intervals
from hybridtrack.calibration.views import View
from hybridtrack.recording import Events, Recording

Array = np.ndarray

EARLY_NS, WIDTH_NS = 100_000.0, 600_000.0
LEAST_INTERVALS = 200
NEIGHBOURS = 0.5  # of successive reads must be of neighbouring rows in one direction
BUSY = 3.0  # times the median interval: a longer one holds a pause


@dataclass(frozen=True)
class RowSkew:
    """`skew_ns` between rows `direction` (+1 upwards in row number, -1 downwards) with its `sigma_ns`, at
    `events_a_row`."""

    skew_ns: float
    sigma_ns: float
    events_a_row: float
    direction: int


def skew_of_intervals(view: Array, step: Array, interval: Array, size: Array) -> RowSkew | None:
    """Skew from intervals (N,) ns between reads `step` (N,) rows apart, in their `view` (N,), of reads of `size` (N,)
    events; None where rows are not scanned in order or too few reads tell.

    The deviation is that of the views' means: load differs from view to view.
    """
    if len(step) < LEAST_INTERVALS:
        return None
    direction = 1 if np.count_nonzero(step == 1) >= np.count_nonzero(step == -1) else -1
    neighbours = step == direction
    if np.mean(neighbours) < NEIGHBOURS:
        return None
    view, interval, size = view[neighbours], interval[neighbours], size[neighbours]
    busy = interval <= BUSY * np.median(interval)
    view, interval, size = view[busy], interval[busy], size[busy]
    means = np.array([interval[view == k].mean() for k in np.unique(view)])
    if len(means) < 2 or means.mean() <= 0:
        return None
    sigma = float(means.std(ddof=1) / np.sqrt(len(means)))
    return RowSkew(float(means.mean()), sigma, float(size.mean()), direction)


def measure_row_skew(recording: Recording, views: list[View], blink: Blink) -> RowSkew | None:
    """Skew under the load of the flips to bright, or None where it is not determined."""
    parts: list[tuple[Array, Array, Array, Array]] = []
    for k, view in enumerate(views):
        events = Events.joined(list(recording.event_blocks(view.t0_ns, view.t1_ns)))
        step, size = np.zeros(len(events), np.int64), np.zeros(len(events), np.int64)
        interval = np.zeros(len(events))
        flips = blink.flips_ns(view.t0_ns + EARLY_NS, view.t1_ns - WIDTH_NS) - EARLY_NS
        count = row_intervals(events.t - blink.epoch_ns, events.y, flips, WIDTH_NS, step, interval, size)
        parts.append((np.full(count, k), step[:count], interval[:count], size[:count]))
    if not parts:
        return None
    return skew_of_intervals(*(np.concatenate(column) for column in zip(*parts, strict=True)))
