"""How far the photoreceptor gets in half a cycle.

A photoreceptor is slow in the dark: its first-order lag is milliseconds where the bright side takes a tenth of one. The
OFF events of a dark half then die out as exp(-t / tau), and what is left of the step at the next flip, exp(-T /
tau), is never seen by the comparator. tau is read from the counts in two windows late in the half, where the
readout's lag of under a millisecond no longer matters.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.kernels import fold_phase
from hybridtrack.calibration.onset import blinking_pixels
from hybridtrack.calibration.views import View, ViewFold
from hybridtrack.recording import Recording

Array = np.ndarray

BINS = 400


@dataclass(frozen=True)
class Settling:
    """`tau_on_ns`, `tau_off_ns`: lag after a flip to bright and to dark, None where over too soon to tell; `share`:
    part of the step of log light that the comparator sees in steady blinking; `phase` (2, BINS): events over the
    cycle."""

    tau_on_ns: float | None
    tau_off_ns: float | None
    share: float
    phase: Array


def decay_time(counts: Array, bin_ns: float) -> float | None:
    """tau of events that die out in `counts` (bins) after a flip, or None where the last part holds next to none.

    Two windows of equal length W: their ratio is exp(-W / tau). The last events of a pixel come late or not at all, as
    its threshold falls; over pixels and views this averages out.
    """
    total = counts.sum()
    if total < 1000:
        return None
    first = max(int(np.searchsorted(np.cumsum(counts), 0.3 * total)), int(1.2e6 / bin_ns))
    last = int(0.96 * len(counts))
    middle = (first + last) // 2
    early, late = counts[first:middle].sum(), counts[middle : 2 * middle - first].sum()
    if last - first < 8 or late < 0.002 * total or late < 50 or late >= early:
        return None
    return float((middle - first) * bin_ns / np.log(early / late))


def measure_settling(recording: Recording, views: list[View], folds: list[ViewFold], blink: Blink) -> Settling:
    """Fold the events of set A of all views over the cycle and read the lags."""
    phase = np.zeros((2, BINS), np.int64)
    for view, fold in zip(views, folds, strict=True):
        selected = blinking_pixels(fold)
        for events in recording.event_blocks(view.t0_ns, view.t1_ns):
            fold_phase(
                events.t, events.x, events.y, events.on, blink.epoch_ns, blink.epoch_phase, blink.hz, selected, phase
            )
    bin_ns = blink.period_ns / BINS
    flip = round(blink.duty * BINS)
    on, off = phase[0, :flip].astype(float), phase[1, flip:].astype(float)
    # Background: what each polarity does late in the half in which it has no cause.
    on_background = phase[0, flip + (BINS - flip) // 2 :].mean()
    off_background = phase[1, flip // 2 : int(0.95 * flip)].mean()
    tau_on, tau_off = decay_time(on - on_background, bin_ns), decay_time(off - off_background, bin_ns)
    left_on = np.exp(-blink.duty * blink.period_ns / tau_on) if tau_on else 0.0
    left_off = np.exp(-(1.0 - blink.duty) * blink.period_ns / tau_off) if tau_off else 0.0
    share = (1.0 - left_on) * (1.0 - left_off) / (1.0 - left_on * left_off)
    return Settling(tau_on, tau_off, float(share), phase)
