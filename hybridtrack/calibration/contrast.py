"""ON and OFF thresholds from a target with one step of light, the hysteresis modelled.

A comparator with thresholds a (ON) and b (OFF) whose reference moves by one threshold an event is, in steady blinking
between two levels a step S apart, left with residuals u in [0, a) after the burst up and w in [0, b) after the burst
down, which it must make good before the first event of the next:

    S = w + N_on a + u = u + N_off b + w,    so   N_on a = N_off b,    N_on a = S - E[u + w]

u and w take all values alike (thresholds differ from pixel to pixel, noise draws them about), E[u + w] = kappa (a +
b) with kappa = 1/2 without noise and a little less with it. Dividing S by N alone is off by kappa (a + b) / S, a
tenth. With r = N_on / N_off = b / a each pixel of each view gives

    a = S / (N_on + kappa (1 + r)),    b = r a.

Other pixels remember otherwise; `pixel_model` tells them apart wherever steps of several sizes were seen.
"""

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from hybridtrack.calibration.pixel_model import LEAST_COUNT, CountCurve, choose_model

if TYPE_CHECKING:
    from hybridtrack.calibration.several_steps import SeveralSteps

Array = np.ndarray

LEAST_PIXELS = 30


@dataclass(frozen=True)
class StepCounts:
    """Observations, one a pixel and view (M,): `pixel` (flat index), `view`, log step `step` as the comparator saw it,
    mean events a flip `on`, `off`, and whether it lies well `inside` a square, where the step needs no model of blur.
    """

    pixel: Array
    view: Array
    step: Array
    on: Array
    off: Array
    inside: Array

    def __getitem__(self, chosen: Array) -> "StepCounts":
        """The observations selected by a mask or index array."""
        return StepCounts(*(getattr(self, name)[chosen] for name in ("pixel", "view", "step", "on", "off", "inside")))


@dataclass(frozen=True)
class ThresholdFit:
    """Medians over pixels with deviations, spreads over pixels, maps (rows, columns; NaN where unknown), the model
    of the pixel that was chosen, the curve behind it, and findings; from a target with `several` steps of light also
    the comparator's `noise` with its deviation. None: not to be told."""

    on: float | None
    off: float | None
    on_sigma: float | None
    off_sigma: float | None
    on_spread: float | None
    off_spread: float | None
    on_map: Array
    off_map: Array
    model: str
    curve: CountCurve
    findings: list[str]
    noise: tuple[float, float] | None = None
    several: "SeveralSteps | None" = None


def count_curve(counts: StepCounts, bins: int = 16) -> CountCurve:
    """Counts averaged over bins of equal width along the step, those with few observations left out."""
    if not len(counts.step):
        return CountCurve(*np.zeros((4, 0)))
    low, high = np.quantile(counts.step, [0.001, 0.999])
    which = np.digitize(counts.step, np.linspace(low, high, bins + 1)[1:-1])
    groups = [np.flatnonzero(which == k) for k in range(bins)]
    columns = [
        [float(counts.step[g].mean()), float(counts.on[g].mean()), float(counts.off[g].mean()), len(g)]
        for g in groups
        if len(g) >= LEAST_PIXELS
    ]
    return CountCurve(*np.array(columns).reshape(-1, 4).T)


def pixel_means(values: Array, pixel: Array, size: int) -> tuple[Array, float]:
    """Mean over the views of each pixel (size,), NaN where none, and the variance of a single view about it."""
    number = np.bincount(pixel, minlength=size)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.bincount(pixel, values, minlength=size) / number
        deviation = (values - mean[pixel]) ** 2 * (number / np.maximum(number - 1, 1))[pixel]
    several = number[pixel] > 1
    return mean, float(np.mean(deviation[several])) if np.any(several) else float("nan")


def spread_over_pixels(mean: Array, variance_of_view: float, number: Array) -> float:
    """Robust deviation from pixel to pixel, what the views' own scatter adds taken off."""
    known = np.isfinite(mean)
    low, high = np.quantile(mean[known], [0.16, 0.84])
    within = variance_of_view * float(np.mean(1.0 / number[known])) if np.isfinite(variance_of_view) else 0.0
    return float(np.sqrt(max((0.5 * (high - low)) ** 2 - within, 0.0)))


def view_medians(values: Array, view: Array) -> Array:
    """Median over each view's observations."""
    return np.array([np.median(values[view == v]) for v in np.unique(view)])


@dataclass(frozen=True)
class _OverPixels:
    """Median over pixels, its deviation, the spread over pixels, and the map (rows, columns)."""

    median: float
    sigma: float
    spread: float
    map: Array


def over_pixels(values: Array, counts: StepCounts, shape: tuple[int, int], relative: float) -> _OverPixels:
    """Sum up one polarity's thresholds (M,) of the observations; `relative`: deviation that the pixel model leaves."""
    size = shape[0] * shape[1]
    mean, variance = pixel_means(values, counts.pixel, size)
    median = float(np.nanmedian(mean))
    by_view = view_medians(values, counts.view)
    statistical = float(np.std(by_view) / np.sqrt(max(len(by_view) - 1, 1)))
    spread = spread_over_pixels(mean, variance, np.bincount(counts.pixel, minlength=size))
    return _OverPixels(median, float(np.hypot(statistical, relative * median)), spread, mean.reshape(shape))


def refused(shape: tuple[int, int], curve: CountCurve, reason: str) -> ThresholdFit:
    """No thresholds, and why."""
    nothing = np.full(shape, np.nan)
    return ThresholdFit(None, None, None, None, None, None, nothing, nothing, "unknown", curve, [reason])


def fit_thresholds(counts: StepCounts, shape: tuple[int, int]) -> ThresholdFit:
    """Thresholds of all pixels of a grid of `shape` (rows, columns).

    Returns a fit with None and a finding where too few pixels saw a step with enough events.
    """
    usable = counts[np.isfinite(counts.step) & (counts.step > 0) & np.isfinite(counts.on) & np.isfinite(counts.off)]
    curve = count_curve(usable)
    good = usable[(usable.on > LEAST_COUNT) & (usable.off > LEAST_COUNT)]
    if len(good.step) < LEAST_PIXELS:
        return refused(
            shape,
            curve,
            "contrast thresholds cannot be told: at least "
            f"{LEAST_PIXELS} pixels inside squares with {LEAST_COUNT:g} events a flip are required, got "
            f"{len(good.step)}",
        )
    choice = choose_model(curve, count_curve(usable[usable.inside]))
    if choice.model == "resets":
        smallest = np.quantile(good.step, 0.02)
        good = good[good.step < max(1.6 * smallest, smallest + 0.3)]
    on, off = good.step / (good.on + choice.on_left(good)), good.step / (good.off + choice.off_left(good))
    up, down = (over_pixels(values, good, shape, choice.relative) for values in (on, off))
    return ThresholdFit(
        up.median, down.median, up.sigma, down.sigma, up.spread, down.spread, up.map, down.map, choice.model, curve,
        choice.findings,
    )  # fmt: skip
