"""Hot pixels by their rate in still light, dead pixels by their silence inside blinking squares.

Still light is the last fifth of the bright half of a cycle, when a burst is long over, and, for pixels away from
everything that blinks, all of the view. A pixel is hot where its count is far more than that of its neighbourhood
could be by chance (Poisson tail); lamps that flicker over a whole patch are not. A pixel is dead where it all but
never fired although light blinked on it by a step that any healthy pixel answers.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import maximum_filter, median_filter
from scipy.stats import poisson

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.event_light import EventSteps
from hybridtrack.calibration.kernels import count_events, count_quiet_events, fold_harmonic
from hybridtrack.calibration.views import View, ViewFold
from hybridtrack.module import Defects
from hybridtrack.recording import Recording

Array = np.ndarray

QUIET = (0.78, 0.97)  # part of the bright half in which nothing changes
HOT_RATIO = 15.0
HOT_LEAST_HZ = 3.0
DEAD_FLIPS = 20
EDGE_VIEWS = 3
FLICKER_LINES = 4
IN_STEP = 0.7  # how far events that a lamp lets loose add up at its rate: they are spread over part of its cycle
CLEAR_STEP = 0.9  # log step that any healthy pixel answers


@dataclass(frozen=True)
class QuietCounts:
    """`count` and `time_s` (rows, columns): events in still light, and for how long each pixel was watched."""

    count: Array
    time_s: Array

    @property
    def rate_hz(self) -> Array:
        """Events a second (rows, columns), zero where not watched."""
        return np.where(self.time_s > 0, self.count / np.maximum(self.time_s, 1e-9), 0.0)


def away_from_blinking(fold: ViewFold, reach_px: int = 4) -> Array:
    """Mask (rows, columns) of pixels with nothing that blinks within `reach_px`.

    A hot pixel alone blinks nowhere: a patch counts where at least three pixels of 3x3 follow the cycle.
    """
    follows = (fold.snr() > 5.0) & (np.abs(fold.amplitude()) > 0.3)
    padded = np.pad(follows.astype(int), 1)
    rows, columns = follows.shape
    crowd = sum(padded[i : i + rows, j : j + columns] for i in range(3) for j in range(3))
    return ~maximum_filter(follows & (crowd >= 3), 2 * reach_px + 1)


def quiet_counts(
    recording: Recording, views: list[View], folds: list[ViewFold], blink: Blink, shape: tuple[int, int]
) -> QuietCounts:
    """Count events in still light over all views."""
    count, time_s = np.zeros(shape, np.int64), np.zeros(shape)
    first, last = QUIET[0] * blink.duty, QUIET[1] * blink.duty
    for view, fold in zip(views, folds, strict=True):
        anytime = away_from_blinking(fold)
        for events in recording.event_blocks(view.t0_ns, view.t1_ns):
            count_quiet_events(
                events.t, events.x, events.y, blink.epoch_ns, blink.epoch_phase, blink.hz, first, last, anytime, count
            )
        time_s += fold.cycles / blink.hz * np.where(anytime, 1.0, last - first)
    return QuietCounts(count, time_s)


def share_of_lamps(recording: Recording, views: list[View], blink: Blink, shape: tuple[int, int]) -> Array:
    """Share (rows, columns) of each pixel's events that follow another light, at one of the blink's `flicker_hz`.

    A pixel of low threshold answers every cycle of a lamp, ON and OFF in turn, while its neighbours are silent: its
    signed events add up at the lamp's rate, those of a hot pixel do not.
    """
    share = np.zeros(shape)
    for rate_hz in blink.flicker_hz[:FLICKER_LINES]:
        lamp = replace(blink, hz=rate_hz, epoch_phase=0.0)
        in_step, count = np.zeros(shape), np.zeros(shape)
        for view in views:
            harmonic = np.zeros(shape, np.complex128)
            for events in recording.event_blocks(view.t0_ns, view.t1_ns, check_order=False):
                columns = events.t, events.x, events.y, events.on
                fold_harmonic(*columns, lamp.epoch_ns, lamp.epoch_phase, lamp.hz, harmonic)
                count_events(events.x, events.y, count)
            in_step += np.abs(harmonic)
        share = np.maximum(share, in_step / (IN_STEP * np.maximum(count, 1.0)))
    return np.minimum(share, 1.0)


def hot_pixels(quiet: QuietCounts) -> Array:
    """Mask (rows, columns) of hot pixels."""
    rate = quiet.rate_hz
    around = median_filter(rate, 5, mode="nearest")
    usual = max(float(np.median(rate)), float(rate.mean()) * 0.1)
    expected_hz = np.maximum(HOT_RATIO * np.maximum(around, usual), HOT_LEAST_HZ)
    tail = poisson.sf(quiet.count - 1, expected_hz * quiet.time_s)
    return (tail < 1e-3 / rate.size) & (rate > expected_hz)


def dead_pixels(folds: list[ViewFold], steps: list[EventSteps]) -> tuple[Array, Array]:
    """Mask of dead pixels, and of those that could be judged (rows, columns): flips of a clear step met them often.

    Near an edge the step rests on a model of its blur: there a pixel is judged from several views only.
    """
    shape = folds[0].planes.shape[1:]
    flips, edge_views, events = np.zeros(shape, int), np.zeros(shape, int), np.zeros(shape, np.int64)
    inside_any = np.zeros(shape, bool)
    for fold, step in zip(folds, steps, strict=True):
        with np.errstate(invalid="ignore"):
            inside, edge = step.log_step > CLEAR_STEP, np.abs(step.edge_step) > CLEAR_STEP
        flips += np.where(inside | edge, 2 * fold.cycles, 0)
        events += np.where(inside | edge, fold.planes.sum(axis=0, dtype=np.int64), 0)
        edge_views += edge
        inside_any |= inside
    judged = (flips >= DEAD_FLIPS) & (inside_any | (edge_views >= EDGE_VIEWS))
    return judged & (events <= 0.02 * flips), judged


def pixel_list(mask: Array) -> list[tuple[int, int]]:
    """`[x, y]` of the pixels in a mask (rows, columns)."""
    y, x = np.nonzero(mask)
    return [(int(a), int(b)) for a, b in zip(x, y, strict=True)]


def find_defects(
    quiet: QuietCounts, folds: list[ViewFold], steps: list[EventSteps], lamps: Array
) -> tuple[Defects, list[str]]:
    """Hot and dead pixels, and findings. The share `lamps` (rows, columns) of events is the room's, not the pixel's."""
    hot = hot_pixels(replace(quiet, count=quiet.count * (1.0 - lamps)))
    dead, judged = dead_pixels(folds, steps)
    findings = []
    excused = int(np.count_nonzero(hot_pixels(quiet) & ~hot))
    if excused:
        findings.append(f"{excused} pixels fire with the room's lamps, and are not counted as hot")
    share = float(np.mean(judged))
    if share < 0.9:
        findings.append(
            f"dead pixels can only be told on the {100 * share:.0f} % of the event grid that blinking squares covered"
        )
    return Defects(hot=pixel_list(hot), dead=pixel_list(dead & ~hot)), findings
