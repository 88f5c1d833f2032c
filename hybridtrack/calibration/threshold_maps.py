"""Thresholds pixel by pixel, from what each made of all steps of light in all views.

Around the medians the events that a pixel lets loose at each step of a view are linear functions of the logs of its two
thresholds and of the light it saw. Their coefficients, and the covariance of what is left, are read from model pixels
with thresholds drawn at random; generalised least squares then gives a pixel's thresholds from all its views. Views
that play alike miss alike, and how much so the model pixels tell, too. The
spread from pixel to pixel is what is left of the estimates' scatter, and each estimate is drawn towards the median
as far as its own variance goes (shrinkage; Efron and Morris 1973).
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.comparator_fit import Comparator, ComparatorFit, play_thresholds
from hybridtrack.calibration.comparator_kernels import EVENTS
from hybridtrack.calibration.pixel_kernels import climb
from hybridtrack.calibration.step_curves import StepAnswers

Array = np.ndarray

PLAYED = 2000  # model pixels a view
MARGIN = 1.2  # their spread over that of the real ones
LEAST_PIXELS = 50
NARROWING = np.array([0.4, 0.33, 0.27, 0.2, 0.17, 0.13, 0.1, 0.08, 0.07])  # of the threshold: noise of the first rounds
FINAL_ROUNDS = 8
STEP_NOISE = 0.004  # relative deviation of the step of light that a pixel saw
LEAST_SPREAD = 0.005
LEAST_VARIANCE = 0.2  # of a sum: no model is trusted beyond half an event


@dataclass(frozen=True, eq=False)
class ThresholdMaps:
    """`on`, `off` (rows, columns), natural log units, NaN where no view shows; `on_sigma`, `off_sigma` their
    deviations; `spread` (2,): relative, from pixel to pixel, with `spread_sigma` (2,)."""

    on: Array
    off: Array
    on_sigma: Array
    off_sigma: Array
    spread: Array
    spread_sigma: Array

    @property
    def coverage(self) -> float:
        """Share of the grid whose thresholds are known."""
        return float(np.mean(np.isfinite(self.on)))


@dataclass(frozen=True, eq=False)
class _ViewModel:
    """Sums of events a view, F of them: those of a median pixel `at_median` (F,), `slope` (F, 3) by log ON
    threshold, log OFF threshold and log of the strongest step from `log_step` on; `precision` (F, F) of what is
    left."""

    at_median: Array
    slope: Array
    log_step: float
    precision: Array

    def information(self, sums: Array, log_step: Array) -> tuple[Array, Array]:
        """Scores (M, 2) of both log thresholds for observed sums (M, F), and their information (2, 2)."""
        gain = self.slope[:, :2].T @ self.precision
        excess = sums - self.at_median - (log_step - self.log_step)[:, None] * self.slope[:, 2]
        return excess @ gain.T, gain @ self.slope[:, :2]


def event_sums(answers: Array) -> Array:
    """Events (M, 2 S) of each step and polarity."""
    return answers[..., EVENTS].reshape(len(answers), -1).astype(float)


def view_model(
    part: StepAnswers, comparator: Comparator, halves_ns: tuple[float, float], logs: Array, seed: int
) -> tuple[_ViewModel, Array]:
    """What thresholds do to the sums of one view, from model pixels in the light of `part` whose thresholds differ by
    `logs` (2, PLAYED) from the comparator's; and by how much the view alone misses them (PLAYED, 2).

    Events of a step up and of the steps down before and after it make up for one another: their precision, not their
    variances alone, says what the sums tell.
    """
    random = np.random.default_rng(seed)
    chosen = part.of(random.integers(0, len(part.swing), PLAYED))
    on, off = logs
    played = play_thresholds(
        chosen, comparator.on * np.exp(on), comparator.off * np.exp(off), comparator, halves_ns, seed
    )
    sums, log_step = event_sums(played), np.log1p(chosen.swing)
    design = np.column_stack([np.ones(PLAYED), on, off, log_step - log_step.mean()])
    found, *_ = np.linalg.lstsq(design, sums, rcond=None)
    left = sums - design @ found
    covariance = left.T @ left / (PLAYED - 4) + LEAST_VARIANCE * np.eye(sums.shape[1])
    model = _ViewModel(found[0], found[1:].T, float(log_step.mean()), np.linalg.inv(covariance))
    score, information = model.information(sums, log_step)
    return model, score @ np.linalg.inv(information) - logs.T


def shared_part(missed: list[Array]) -> Array:
    """Correlation (2,) between views of what they miss (PLAYED, 2): what they play alike they miss alike."""
    if len(missed) < 2:
        return np.zeros(2)
    errors = np.stack(missed)  # (V, PLAYED, 2)
    count = len(errors)
    own = np.mean(errors**2, axis=(0, 1))
    of_mean = np.mean(errors.mean(axis=0) ** 2, axis=0)
    return np.clip((count * of_mean / own - 1.0) / (count - 1.0), 0.0, 1.0)


def robust_spread(values: Array) -> float:
    """Half of the range that holds 68 %."""
    low, high = np.quantile(values, [0.16, 0.84])
    return float(0.5 * (high - low))


def pixel_estimates(
    data: StepAnswers, fit: ComparatorFit, halves_ns: tuple[float, float], size: int, seed: int
) -> tuple[Array, Array, Array]:
    """Flat indices (K,) of the pixels seen, their log thresholds (K, 2) from the medians, with covariance (K, 2, 2)."""
    width = MARGIN * max(fit.comparator.on_spread, fit.comparator.off_spread, 0.01)
    comparator = replace(fit.comparator, on_spread=0.0, off_spread=0.0)
    logs = width * np.random.default_rng(seed).standard_normal((2, PLAYED))
    score, information, number, missed = np.zeros((size, 2)), np.zeros((size, 2, 2)), np.zeros(size), []
    for view in np.unique(data.view):
        own = data.of(data.view == view)
        if len(own.swing) < LEAST_PIXELS:
            continue
        model, misses = view_model(own, comparator, halves_ns, logs, seed + int(view))
        scores, each = model.information(event_sums(own.answers), np.log1p(own.swing))
        score[own.pixel] += scores
        information[own.pixel] += each
        number[own.pixel] += 1
        missed.append(misses)
    seen = np.flatnonzero(number)
    covariance = np.linalg.inv(information[seen])
    estimate = np.einsum("kpq,kq->kp", covariance, score[seen])
    wider = np.sqrt(1.0 + shared_part(missed) * (number[seen, None] - 1.0))
    return seen, estimate, covariance * wider[:, :, None] * wider[:, None, :]


@dataclass(frozen=True, eq=False)
class _Polarity:
    thresholds: Array
    sigma: Array
    spread: float
    spread_sigma: float


def _polarity(estimate: Array, variance: Array, seen: Array, median: float, shape: tuple[int, int]) -> _Polarity:
    """Map, deviations and spread of one polarity from the log estimates (K,) of the pixels `seen` (K,)."""
    centred, usual = estimate - np.median(estimate), float(np.median(variance))
    scatter = robust_spread(centred)
    spread2 = max(scatter**2 - usual, (0.1 * scatter) ** 2)
    keep = spread2 / (spread2 + variance)
    thresholds, sigma = np.full(shape, np.nan), np.full(shape, np.nan)
    thresholds.flat[seen] = median * np.exp(keep * centred)
    sigma.flat[seen] = median * np.sqrt(keep * variance)
    # The scatter's own deviation, and a tenth of what was taken off for the estimates' variance.
    doubt = float(np.hypot(scatter**2 * np.sqrt(2.0 / len(seen)), 0.1 * usual))
    return _Polarity(thresholds, sigma, float(np.sqrt(spread2)), doubt / (2.0 * float(np.sqrt(spread2))))


def climbed(data: StepAnswers, fit: ComparatorFit, spread: Array, shape: tuple[int, int]) -> ThresholdMaps:
    """Maps from every flip's count, where the reference moves by one threshold an event and is known with the counts.

    `spread` (2,): relative, from pixel to pixel; it draws thresholds towards the medians `fit` found.
    """
    order = np.lexsort((data.view, data.pixel))
    seen, begin = np.unique(data.pixel[order], return_index=True)
    found, covariance = np.zeros((len(seen), 2)), np.zeros((len(seen), 2, 2))
    median, noise = np.array([fit.comparator.on, fit.comparator.off]), fit.comparator.noise
    sigmas = np.maximum(np.concatenate([NARROWING * median.mean(), np.zeros(FINAL_ROUNDS)]), noise)
    climb(
        np.append(begin, len(order)), data.swing[order], data.view[order], data.start, data.length, data.strength,
        np.ascontiguousarray(data.counts[order, :, 0]), np.ascontiguousarray(data.counts[order, :, 1]), median,
        spread * median, sigmas, STEP_NOISE, found, covariance,
    )  # fmt: skip
    planes = []
    for values in (found[:, 0], found[:, 1], np.sqrt(covariance[:, 0, 0]), np.sqrt(covariance[:, 1, 1])):
        plane = np.full(shape, np.nan)
        plane.flat[seen] = values
        planes.append(plane)
    on, off, on_sigma, off_sigma = planes
    return ThresholdMaps(on, off, on_sigma, off_sigma, spread, np.zeros(2))


def threshold_maps(
    data: StepAnswers, fit: ComparatorFit, halves_ns: tuple[float, float], shape: tuple[int, int], seed: int = 5
) -> ThresholdMaps:
    """Maps for a grid of `shape` (rows, columns) around the medians of `fit`.

    Sums over the steps of each view give the spread; where the reference steps, every flip then gives the pixels.
    """
    size = shape[0] * shape[1]
    seen, estimate, covariance = pixel_estimates(data, fit, halves_ns, size, seed)
    medians = (fit.comparator.on, fit.comparator.off)
    up, down = (_polarity(estimate[:, p], covariance[:, p, p], seen, medians[p], shape) for p in (0, 1))
    spread, doubt = np.array([up.spread, down.spread]), np.array([up.spread_sigma, down.spread_sigma])
    if fit.comparator.model == "steps":
        return replace(climbed(data, fit, np.maximum(spread, LEAST_SPREAD), shape), spread_sigma=doubt)
    return ThresholdMaps(up.thresholds, down.thresholds, up.sigma, down.sigma, spread, doubt)
