"""ON and OFF thresholds from a target with one step of light, the hysteresis modelled.

A comparator with thresholds a (ON) and b (OFF) whose reference moves by one threshold an event is, in steady blinking
between two levels a step S apart, left with residuals u in [0, a) after the burst up and w in [0, b) after the burst
down, which it must make good before the first event of the next:

    S = w + N_on a + u = u + N_off b + w,    so   N_on a = N_off b,    N_on a = S - E[u + w]

u and w take all values alike (thresholds differ from pixel to pixel, noise draws them about), E[u + w] = kappa (a +
b) with kappa = 1/2 without noise and a little less with it. Dividing S by N alone is off by kappa (a + b) / S, a
tenth. With r = N_on / N_off = b / a each pixel of each view gives

    a = S / (N_on + kappa (1 + r)),    b = r a.

Another pixel forgets what came while it was dead after an event: its reference starts afresh from the present level.
Its counts fall behind as S grows. N over S tells the two apart wherever steps of several sizes were seen, and
thresholds then come from the smallest steps alone, with a deviation that says so.
"""

from dataclasses import dataclass

import numpy as np

Array = np.ndarray

KAPPA = 0.485
KAPPA_SIGMA = 0.05
LEAST_COUNT = 1.5  # events a flip below which hysteresis locks in and the mean count says little
LEAST_PIXELS = 30


@dataclass(frozen=True)
class StepCounts:
    """Observations, one a pixel and view (M,): `pixel` (flat index), `view`, log step `step` as the comparator saw it,
    and mean events a flip `on`, `off`."""

    pixel: Array
    view: Array
    step: Array
    on: Array
    off: Array

    def __getitem__(self, chosen: Array) -> "StepCounts":
        """The observations selected by a mask or index array."""
        return StepCounts(*(getattr(self, name)[chosen] for name in ("pixel", "view", "step", "on", "off")))


@dataclass(frozen=True)
class CountCurve:
    """Mean counts over the size of the step, for figures and for the choice of pixel model: all (B,)."""

    step: Array
    on: Array
    off: Array
    number: Array


@dataclass(frozen=True)
class ThresholdFit:
    """Medians over pixels with deviations, spreads over pixels, maps (rows, columns; NaN where unknown), the model
    of the pixel that was chosen ("steps" or "resets"), the curve behind it, and findings. None: not to be told."""

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


def thresholds_by_steps(counts: StepCounts) -> tuple[Array, Array]:
    """ON and OFF threshold (M,) from each observation, the reference taken to move in steps."""
    ratio = counts.on / counts.off
    on = counts.step / (counts.on + KAPPA * (1.0 + ratio))
    return on, on * ratio


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


def falls_behind(curve: CountCurve, on: float, off: float) -> bool:
    """Whether counts at the largest steps fall short of what thresholds from the smallest usable steps predict."""
    usable = np.flatnonzero((curve.on > LEAST_COUNT) & (curve.off > LEAST_COUNT) & (curve.step < 4.0 * (on + off)))
    if len(usable) < 2 or curve.step[-1] < 1.5 * curve.step[usable[0]]:
        return False
    small = usable[: max(1, len(usable) // 3)]
    shortfalls = []
    for name in ("on", "off"):
        number, other = getattr(curve, name), getattr(curve, "off" if name == "on" else "on")
        threshold = np.mean(curve.step[small] / (number[small] + KAPPA * (1.0 + number[small] / other[small])))
        expected = curve.step[-1] / threshold - KAPPA * (1.0 + number[-1] / max(other[-1], 1e-9))
        shortfalls.append(1.0 - number[-1] / max(expected, 1e-9))
    return max(shortfalls) > 0.2


def model_deviation(curve: CountCurve, on: float, off: float) -> tuple[float, str | None]:
    """Relative deviation that the unknown pixel model leaves, and a finding where steps are too uniform to test it."""
    hysteresis = KAPPA_SIGMA * (on + off) / float(np.median(curve.step))
    usable = (curve.on > LEAST_COUNT) & (curve.off > LEAST_COUNT)
    if np.count_nonzero(usable) < 3 or curve.step[usable].max() < 1.4 * curve.step[usable].min():
        # A reference that leaps to the level reached leaves half a threshold of its own instead of both residuals.
        between = 0.5 * KAPPA * (on + off) / float(np.median(curve.step))
        return float(np.hypot(hysteresis, 0.6 * between)), (
            "steps of light are too alike to tell the pixel's model from counts: thresholds rest on a reference that "
            "moves by one threshold an event"
        )
    # How well one pair of thresholds explains all step sizes.
    threshold = curve.step / (curve.on + KAPPA * (1.0 + curve.on / np.maximum(curve.off, 1e-9)))
    scatter = float(np.std(threshold[usable]) / np.mean(threshold[usable]))
    return float(np.hypot(hysteresis, 0.5 * scatter)), None


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
    on, off = thresholds_by_steps(good)
    model, findings = "steps", []
    if falls_behind(curve, float(np.median(on)), float(np.median(off))):
        model = "resets"
        smallest = np.quantile(good.step, 0.02)
        good = good[good.step < max(1.6 * smallest, smallest + 0.3)]
        on, off = thresholds_by_steps(good)
        findings.append(
            "counts fall behind as steps grow: the pixels lose what happens in their refractory time, and thresholds "
            "are taken from the smallest steps alone"
        )
    relative, finding = model_deviation(curve, float(np.median(on)), float(np.median(off)))
    if model == "resets":
        relative = float(np.hypot(relative, 0.08))
    if finding:
        findings.append(finding)
    up, down = (over_pixels(values, good, shape, relative) for values in (on, off))
    return ThresholdFit(
        up.median, down.median, up.sigma, down.sigma, up.spread, down.spread, up.map, down.map, model, curve, findings
    )
