"""How late the first event is, against light: what of the latency light explains, and what would be left without it.

A first-order photoreceptor (Lichtsteiner, Posch and Delbruck 2008) follows a step of log light with a time constant
inversely proportional to light, so that the first event of a pixel comes at

    T = t0 + M / light,

M spread over pixels by threshold, noise and hysteresis alike at every light, for the step of log light is the same.
Stamps lag behind a queue; what a row's read tells is which of its pixels have fired by then (current status data,
first_fire.py), so that each class of pixels of nearly equal light gets the distribution of its T whatever the queue.
Any linear mean over quantiles of T is then a line over 1 / light; its intercept is t0: the flip of the light itself,
plus what does not depend on light (comparator, bus, one row of the scan). Pixel mismatch is fixed, and light falls off
with the place of a pixel, so the deviation comes from leaving out groups of pixels (jackknife; Efron 1982), not from
the number of flips.
"""

from dataclasses import dataclass

import numpy as np
from scipy.optimize import isotonic_regression

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.event_light import EventSteps
from hybridtrack.calibration.latency_kernels import status_by_class
from hybridtrack.calibration.views import View
from hybridtrack.recording import Events, Recording

Array = np.ndarray

BIN_NS = 2_000.0
BEFORE_NS = 300_000.0  # the clock is that of first events: light flips before it
REACH_NS = 3_000_000.0
CLASSES, GROUPS = 8, 16
TILE = 4  # event px: neighbours stay in one group
LEAST_PIXELS = 40  # of a class in a view
LOW, HIGH = 0.05, 0.90  # quantiles between which the mean is taken: what comes later is seen by few reads


@dataclass(frozen=True)
class LatencyCurve:
    """`light_dn` (C,), `delay_ns` (C,) of classes of pixels with their `sigma_ns` (C,), ns after the blink clock's
    flip.

    The line through them: `intercept_ns` with deviation `intercept_sigma_ns`, and `slope_ns_dn`, its
    `slope_sigma_ns_dn` (ns times DN: delay = intercept + slope / light). `chi2` of the line over `freedom`.
    `reference_light_dn`: harmonic mean light of the pixels, the one at which the line takes their mean delay,
    `mean_delay_ns`.
    """

    light_dn: Array
    delay_ns: Array
    sigma_ns: Array
    intercept_ns: float
    intercept_sigma_ns: float
    slope_ns_dn: float
    slope_sigma_ns_dn: float
    chi2: float
    freedom: int
    reference_light_dn: float
    mean_delay_ns: float


def smooth_light(mask: Array, light: Array) -> Array:
    """Light (N,) at pixels in `mask` (rows, columns) by the quadratic in their place that fits `light` (N,) best."""
    row, column = (place / max(size, 1) - 0.5 for place, size in zip(np.nonzero(mask), mask.shape, strict=True))
    terms = np.stack([np.ones(len(row)), column, row, column**2, row**2, column * row], axis=1)
    return terms @ np.linalg.lstsq(terms, light, rcond=None)[0]


def light_classes(mask: Array, light: Array) -> Array:
    """Class of light (N,) of each pixel in `mask`, evenly spaced from the dimmest to the brightest.

    Classes go by smoothed light: sorted by the measured light itself, a class's mean would err with the noise that put
    its pixels there, and every slope would come out too flat.
    """
    smooth = smooth_light(mask, light)
    low, high = np.percentile(smooth, [1.0, 99.0])
    edges = np.linspace(low, max(high, low * (1 + 1e-6)), CLASSES + 1)[1:-1]
    return np.digitize(smooth, edges)


def pixel_groups(shape: tuple[int, int]) -> Array:
    """Group (rows, columns) of each pixel: tiles scattered without order, the same in every view."""
    tiles = (shape[0] // TILE + 1, shape[1] // TILE + 1)
    group = np.random.default_rng(0).integers(0, GROUPS, tiles)
    rows, columns = np.arange(shape[0]) // TILE, np.arange(shape[1]) // TILE
    return group[rows[:, None], columns[None, :]]


def trimmed_mean(status: Array) -> float:
    """Mean of T between the quantiles LOW and HIGH, ns after the flip, of pixels with `status` (2, bins); NaN if
    unseen.

    The share fired by each instant is made to rise (Ayer et al. 1955); between reads it rises in a straight line.
    """
    read = status[1] > 0
    if np.count_nonzero(read) < 10:
        return float("nan")
    time = (np.flatnonzero(read) + 0.5) * BIN_NS - BEFORE_NS
    share = isotonic_regression(status[0, read] / status[1, read], weights=status[1, read]).x
    if share[0] > LOW or share[-1] < HIGH:
        return float("nan")
    inside = np.clip(share, LOW, HIGH)
    # The mean of a quantile function is the area left of the distribution.
    middle = 0.5 * (inside[1:] + inside[:-1])
    area = float(np.sum(np.diff(time) * (HIGH - middle)))
    return float(time[0]) + area / (HIGH - LOW)


@dataclass(frozen=True)
class ClassStatus:
    """One view's `status` (GROUPS, CLASSES, 2, bins), number of `pixels` (GROUPS, CLASSES) and sum of their inverse
    light `inverse` (GROUPS, CLASSES)."""

    status: Array
    pixels: Array
    inverse: Array

    def points(self, group: int | None = None) -> Array:
        """Mean inverse light, delay and number of pixels (3, CLASSES) of each class, one `group` left out; delay NaN
        and number 0 where too few."""
        kept = np.arange(len(self.status)) != (-1 if group is None else group)
        status, pixels, inverse = (part[kept].sum(axis=0) for part in (self.status, self.pixels, self.inverse))
        delay = np.array([trimmed_mean(each) if n >= LEAST_PIXELS else np.nan
                          for each, n in zip(status, pixels, strict=True)])  # fmt: skip
        known = np.isfinite(delay)
        mean = inverse / np.maximum(pixels, 1)
        return np.array([np.where(known, mean, 0.0), np.where(known, delay, 0.0), np.where(known, pixels, 0.0)])


def collect_status(recording: Recording, view: View, step: EventSteps, blink: Blink) -> ClassStatus | None:
    """Reads after all flips to bright of a view, by group and class of light; None where too few pixels are seen."""
    mask = np.isfinite(step.log_step) & (step.hits.kind == 1) & (step.bright_dn > 0)
    if np.count_nonzero(mask) < 3 * LEAST_PIXELS:
        return None
    shape, size, light = mask.shape, GROUPS * CLASSES, step.bright_dn[mask]
    number = np.zeros(shape, np.int64)
    number[mask] = light_classes(mask, light)
    kind = np.where(mask, pixel_groups(shape) * CLASSES + number, -1).astype(np.int64)
    # A view's events are read whole: a flip must not be cut by the end of a block.
    events = Events.joined(list(recording.event_blocks(view.t0_ns, view.t1_ns)))
    reach_ns = min(BEFORE_NS + REACH_NS, 0.45 * blink.period_ns)
    flips = blink.flips_ns(view.t0_ns + BEFORE_NS, view.t1_ns - reach_ns)
    status = np.zeros((size, 2, int(reach_ns / BIN_NS)))
    status_by_class(
        events.t - blink.epoch_ns,
        events.x,
        events.y,
        events.on,
        1,
        flips,
        BEFORE_NS,
        BIN_NS,
        kind,
        np.full(shape, -1, np.int64),
        np.zeros((shape[0], size), np.int64),
        np.zeros((shape[0], size), np.int64),
        status,
    )
    pixels = np.bincount(kind[mask], minlength=size).astype(float)
    inverse = np.bincount(kind[mask], 1.0 / light, minlength=size)
    parts = (GROUPS, CLASSES)
    return ClassStatus(status.reshape(*parts, 2, -1), pixels.reshape(parts), inverse.reshape(parts))


@dataclass(frozen=True)
class CommonLine:
    """Line of one slope through points (V, CLASSES) of views that may be shifted as a whole: its `slope`, the means
    `inverse` and `delay_ns` it passes through, and the `shift_ns` (V,) of each view against it."""

    slope: float
    inverse: float
    delay_ns: float
    shift_ns: Array

    @property
    def intercept_ns(self) -> float:
        """Delay in light without end."""
        return self.delay_ns - self.slope * self.inverse


def common_line(points: Array) -> CommonLine | None:
    """The line through `points` (V, 3, CLASSES): inverse light, delay, weight; None where light does not vary.

    Views shift as a whole by what the readout's load does to them; only differences within a view tell the slope.
    """
    x, y, weight = points[:, 0], points[:, 1], points[:, 2]
    total = np.maximum(weight.sum(axis=1, keepdims=True), 1e-300)
    x_mean, y_mean = (np.sum(weight * v, axis=1, keepdims=True) / total for v in (x, y))
    spread = float(np.sum(weight * (x - x_mean) ** 2))
    if spread <= 1e-9 * float(np.sum(weight * x**2)):
        return None
    slope = float(np.sum(weight * (x - x_mean) * (y - y_mean))) / spread
    inverse, delay = (float(np.sum(weight * v) / weight.sum()) for v in (x, y))
    shift = (y_mean - delay - slope * (x_mean - inverse))[:, 0]
    return CommonLine(slope, inverse, delay, np.where(weight.sum(axis=1) > 0, shift, 0.0))


def merged(points: Array, line: CommonLine) -> Array:
    """Points (3, CLASSES) for the figure: those of all views, their shifts taken off, by evenly spaced light."""
    x, y, weight = points[:, 0].ravel(), (points[:, 1] - line.shift_ns[:, None]).ravel(), points[:, 2].ravel()
    x, y, weight = x[weight > 0], y[weight > 0], weight[weight > 0]
    edges = np.linspace(x.min(), x.max(), CLASSES + 1)[1:-1]
    number = np.digitize(x, edges)
    total = np.bincount(number, weight, minlength=CLASSES)
    means = [np.bincount(number, weight * v, minlength=CLASSES) / np.maximum(total, 1e-300) for v in (x, y)]
    return np.array([*means, total])


def fit_curve(found: list[ClassStatus]) -> LatencyCurve | None:
    """Line of delay over inverse light with jackknifed deviations, or None where the classes do not tell one."""
    points = np.array([view.points() for view in found])
    line = common_line(points)
    if line is None:
        return None
    shown = merged(points, line)
    known = shown[2] > 0
    lines, delays = [], []
    for group in range(GROUPS):
        part = np.array([view.points(group) for view in found])
        other = common_line(part)
        if other is None:
            return None
        lines.append((other.intercept_ns, other.slope))
        delays.append(merged(part, other)[1][known])
    spread = np.sqrt((GROUPS - 1) * np.var(np.array(lines), axis=0))
    sigma = np.maximum(np.sqrt((GROUPS - 1) * np.var(np.array(delays), axis=0)), 0.1 * BIN_NS)
    x, y = shown[0][known], shown[1][known]
    chi2 = float(np.sum(((y - line.intercept_ns - line.slope * x) / sigma) ** 2))
    return LatencyCurve(
        light_dn=1.0 / x,
        delay_ns=y,
        sigma_ns=sigma,
        intercept_ns=line.intercept_ns,
        intercept_sigma_ns=float(spread[0]),
        slope_ns_dn=line.slope,
        slope_sigma_ns_dn=float(spread[1]),
        chi2=chi2,
        freedom=len(x) - 2,
        reference_light_dn=1.0 / line.inverse,
        mean_delay_ns=line.delay_ns,
    )


def measure_latency(
    recording: Recording, views: list[View], steps: list[EventSteps], blink: Blink
) -> LatencyCurve | None:
    """Latency against light of the pixels well inside set A, by all flips to bright of `blink`.

    `steps`: light of each view's event pixels. None where too few pixels or reads tell.
    """
    found = [collect_status(recording, view, step, blink) for view, step in zip(views, steps, strict=True)]
    seen = [status for status in found if status is not None]
    return fit_curve(seen) if seen else None
