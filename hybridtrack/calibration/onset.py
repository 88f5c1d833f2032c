"""When exactly the light flips, from the events that a flip lets loose.

Stamps lag with load: a row-scanned readout needs most of a millisecond to empty a burst. The first events of a burst
meet an idle readout, so the flip is dated by a low quantile of the ON burst of set A, the background before the flip
taken off, and never by a mean. All flips are then regressed on the cycle number, views weighted as clusters, which
gives the blink frequency and phase together with their deviations.

What is left in the phase is the latency of photoreceptor, comparator and idle readout. With one light level and one
contrast it can't be told from an offset between the clocks.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.kernels import flip_histogram
from hybridtrack.calibration.views import View, ViewFold
from hybridtrack.errors import NoBlinkError
from hybridtrack.recording import Recording

Array = np.ndarray

BIN_NS = 1_000.0
BEFORE_NS = 2_500_000.0
AFTER_NS = 2_500_000.0
QUANTILE = 0.01
LEAST_EVENTS = 200
WANDER = 0.1  # of the onset's rise: how far views shift as a whole, by light and load (measured: 5 to 12 %)
WANDER_VIEWS = 4  # what that is worth, in views: few views may line up by chance


@dataclass(frozen=True)
class OnsetFit:
    """Blink clock by burst onsets.

    `covariance` (2, 2) of (phase in ns at `centre_ns`, relative frequency), scatter only; `systematic_ns`: deviation
    that all flips share. `rise_ns`: time between the quantiles a third and three times that used, which says how
    sharp the onset is; `view_residual_ns` (V,): mean residual a view.
    """

    blink: Blink
    centre_ns: float
    covariance: Array
    systematic_ns: float
    rise_ns: float
    flip_time_ns: Array
    flip_residual_ns: Array
    view_residual_ns: Array


def blinking_pixels(fold: ViewFold, sign: int = 1) -> Array:
    """Mask (rows, columns) of pixels well inside set A (or B for `sign` -1): as strong as the middle of their kind."""
    strength = sign * fold.amplitude()
    strong = strength[strength > 0.5]
    if not len(strong):
        return np.zeros(strength.shape, bool)
    return (strength > 0.6 * np.median(strong)) & (strength < 3.0 * np.median(strong)) & (fold.snr() > 4.0)


def quantile_times(histogram: Array, fractions: tuple[float, ...]) -> Array:
    """Times (flips, len(fractions)) ns from the first bin at which a burst reaches a fraction of its events.

    The rate in the first 0.8 ms, before the burst, is taken off. NaN where a flip has too few events.
    """
    quiet = int(800_000 / BIN_NS)
    background = histogram[:, :quiet].mean(axis=1, keepdims=True)
    rising = np.cumsum(histogram - background, axis=1)
    times = np.full((len(histogram), len(fractions)), np.nan)
    for k, curve in enumerate(rising):
        total = curve[-1]
        if total < LEAST_EVENTS:
            continue
        for j, fraction in enumerate(fractions):
            level = fraction * total
            # The last bin below the level: noise before the burst may cross it early, the burst crosses it for good.
            below = int(np.flatnonzero(curve < level)[-1]) if np.any(curve < level) else 0
            step = curve[min(below + 1, len(curve) - 1)] - curve[below]
            times[k, j] = (below + 1 + (level - curve[below]) / step if step > 0 else below + 1) * BIN_NS
    return times


def onsets_of_view(recording: Recording, view: View, fold: ViewFold, blink: Blink) -> tuple[Array, Array]:
    """Flip numbers (K,) and quantile times (K, 3) ns after `blink.epoch_ns`, for the flips of one view to bright."""
    reach = BEFORE_NS + AFTER_NS
    flips = blink.flips_ns(view.t0_ns + BEFORE_NS, view.t1_ns - AFTER_NS)
    # Late in a short cycle the window would reach into the next flip.
    bins = int(min(reach, 0.9 * blink.period_ns) / BIN_NS)
    histogram = np.zeros((len(flips), bins), np.uint32)
    selected = blinking_pixels(fold)
    for events in recording.event_blocks(view.t0_ns, view.t1_ns):
        flip_histogram(
            events.t - blink.epoch_ns, events.x, events.y, events.on, 1, flips, BEFORE_NS, BIN_NS, selected, histogram
        )
    times = quantile_times(histogram.astype(float), (QUANTILE / 3, QUANTILE, 3 * QUANTILE))
    number = np.rint(flips / blink.period_ns + blink.epoch_phase)
    return number, times + (flips - BEFORE_NS)[:, None]


def regress(
    number: Array, onset_ns: Array, view: Array, centre: float, wander_ns: float | None = None
) -> tuple[Array, Array, Array]:
    """Robust line of onset over flip number: (intercept at `centre`, period), covariance (2, 2), residuals (K,).

    Huber weights; the covariance adds the scatter of flips and that of whole views, whose flips share light and load.
    `wander_ns`: how far views are expected to shift; the scatter of a few views is drawn towards it.
    """
    design = np.column_stack([np.ones(len(number)), number - centre])
    weight = np.ones(len(number))
    for _ in range(20):
        normal = design.T @ (design * weight[:, None])
        line = np.linalg.solve(normal, design.T @ (weight * onset_ns))
        residual = onset_ns - design @ line
        scale = max(1.4826 * float(np.median(np.abs(residual))), 100.0)
        weight = np.minimum(1.0, 1.5 * scale / np.maximum(np.abs(residual), 1e-9))
    groups = np.unique(view)
    means = np.array([design[view == g].mean(axis=0) for g in groups])
    shifts = np.array([np.average(residual[view == g], weights=weight[view == g]) for g in groups])
    covariance = np.linalg.inv(normal) * scale**2
    if len(groups) > 2:
        # Views that shift as a whole: the line is then one through the views' means.
        variance, freedom = float(np.sum(shifts**2)), len(groups) - 2
        if wander_ns is not None:
            variance, freedom = variance + WANDER_VIEWS * wander_ns**2, freedom + WANDER_VIEWS
        covariance = covariance + np.linalg.inv(means.T @ means) * variance / freedom
    return line, covariance, residual


def fit_onsets(recording: Recording, blink: Blink, views: list[View], folds: list[ViewFold]) -> OnsetFit:
    """Refine frequency and phase by the onsets of all flips to bright.

    Raises NoBlinkError where no view has enough events a flip to date it.
    """
    numbers, times, owner = [], [], []
    for k, (view, fold) in enumerate(zip(views, folds, strict=True)):
        number, found = onsets_of_view(recording, view, fold, blink)
        usable = np.all(np.isfinite(found), axis=1)
        numbers.append(number[usable])
        times.append(found[usable])
        owner.append(np.full(np.count_nonzero(usable), k))
    number, time, view_of = np.concatenate(numbers), np.concatenate(times), np.concatenate(owner)
    if len(number) < 4:
        raise NoBlinkError(
            f"flips cannot be dated: at least {LEAST_EVENTS} ON events a flip are required, and only {len(number)} "
            f"flips of {blink.hz:.2f} Hz have as many"
        )
    centre = float(np.round(number.mean()))
    rise_ns = float(np.median(time[:, 2] - time[:, 0]))
    line, covariance, residual = regress(number, time[:, 1], view_of, centre, WANDER * rise_ns)
    period = float(line[1])
    scaling = np.diag([1.0, 1.0 / period])
    refined = replace(
        blink,
        hz=1e9 / period,
        sigma_hz=float(np.sqrt(covariance[1, 1])) / period * 1e9 / period,
        epoch_phase=float((centre - line[0] / period) % 1.0),
        fold_lead=0.015,
    )
    view_residual = np.array(
        [residual[view_of == k].mean() if np.any(view_of == k) else np.nan for k in range(len(views))]
    )
    return OnsetFit(
        blink=refined,
        centre_ns=float(blink.epoch_ns + line[0]),
        covariance=scaling @ covariance @ scaling,
        systematic_ns=rise_ns,
        rise_ns=rise_ns,
        flip_time_ns=blink.epoch_ns + time[:, 1],
        flip_residual_ns=residual,
        view_residual_ns=view_residual,
    )
