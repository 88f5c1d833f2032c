"""When the pixels fire after a flip, seen past the queue of the readout.

A row-scanned readout stamps an event when its row is read, so that under load the stamps of first events say little
about when they happened. But each time a row is read, all its pixels that have fired by then have been read: the
share of fired pixels at that instant is a sample of the distribution F of firing times (current status data; Ayer et
al. 1955), whatever the queue. The isotonic regression of those shares on time is its maximum-likelihood estimate, and

    mean delay of the first event = integral of (1 - F).

With a readout that stamps each event by itself the same count holds, a row then being any line of pixels.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import isotonic_regression

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.kernels import first_fire_status
from hybridtrack.calibration.onset import OnsetFit, blinking_pixels
from hybridtrack.calibration.views import View, ViewFold
from hybridtrack.recording import Events, Recording

Array = np.ndarray

BIN_NS = 2_000.0
BEFORE_NS = 100_000.0
AFTER_NS = 2_400_000.0
LEAST_READS = 200
SHARE_OF_DELAY = 0.2  # of the delay found counts as its deviation: pixels in dim corners are later than others
FLOOR_NS = 3_000.0


@dataclass(frozen=True)
class FirstFire:
    """`fired` (B,): share of pixels that have fired, over `time_ns` (B,) after the onset; `delay_ns`: mean delay of the
    first event after the onset, `sigma_ns` its deviation."""

    time_ns: Array
    fired: Array
    delay_ns: float
    sigma_ns: float


def status_of_view(recording: Recording, view: View, fold: ViewFold, blink: Blink) -> Array:
    """Pixels fired, and pixels that will fire (2, bins), summed over reads of the flips of a view."""
    flips = blink.flips_ns(view.t0_ns + BEFORE_NS, view.t1_ns - AFTER_NS)
    shape = fold.planes.shape[1:]
    status = np.zeros((2, int((BEFORE_NS + AFTER_NS) / BIN_NS)))
    # A view's events are read whole: a flip must not be cut by the end of a block.
    events = Events.joined(list(recording.event_blocks(view.t0_ns, view.t1_ns)))
    first_fire_status(
        events.t - blink.epoch_ns,
        events.x,
        events.y,
        events.on,
        flips,
        BEFORE_NS,
        AFTER_NS,
        BIN_NS,
        blinking_pixels(fold),
        np.full(shape, -1, np.int64),
        np.zeros(shape[0], np.int64),
        np.zeros(shape[0], np.int64),
        status,
    )
    return status


def fired_share(status: Array) -> tuple[Array, Array]:
    """Instants (K,) ns after the onset with reads, and the share fired by then (K,), which does not fall."""
    read = status[1] > 0
    time = (np.flatnonzero(read) + 0.5) * BIN_NS - BEFORE_NS
    share = isotonic_regression(status[0, read] / status[1, read], weights=status[1, read]).x
    return time, share


def measure_first_fire(
    recording: Recording, views: list[View], folds: list[ViewFold], onset: OnsetFit
) -> FirstFire | None:
    """Mean delay of first events after the onset of `onset`, or None where too few reads tell."""
    statuses = [status_of_view(recording, view, fold, onset.blink) for view, fold in zip(views, folds, strict=True)]
    total = np.sum(statuses, axis=0)
    if np.count_nonzero(total[1]) < 20 or total[1].sum() < LEAST_READS:
        return None
    time, share = fired_share(total)
    edges = np.concatenate([[-BEFORE_NS], time, [AFTER_NS]])
    level = np.concatenate([[0.0], share, [1.0]])
    # Between reads the share is taken to rise in a straight line.
    area = np.sum(np.diff(edges) * (1.0 - 0.5 * (level[1:] + level[:-1])))
    delay = float(area) - BEFORE_NS
    return FirstFire(time, share, delay, float(np.hypot(FLOOR_NS, SHARE_OF_DELAY * delay)))


def at_mean_first_event(onset: OnsetFit, first: FirstFire | None) -> OnsetFit:
    """The blink clock moved from the onset of bursts to the mean first event, by which latency is defined."""
    if first is None:
        return onset
    blink = onset.blink
    phase = (blink.epoch_phase - first.delay_ns / blink.period_ns) % 1.0
    return replace(
        onset,
        blink=replace(blink, epoch_phase=float(phase)),
        centre_ns=onset.centre_ns + first.delay_ns,
        systematic_ns=first.sigma_ns,
    )
