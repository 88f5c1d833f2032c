"""How many events a step of light gives: one odd curve for all pixels, found from the data.

Thresholds, hysteresis, refractory time and a slow photoreceptor all bend the curve; a form with knots follows each of
them. Pixels differ by a gain, views by a scale (light and temperature change between them).
"""

from dataclasses import dataclass

import numpy as np
from scipy.optimize import nnls

Array = np.ndarray

KNOTS = 14
# Counts are whole numbers behind their mean: no smooth curve follows their steps more closely than this.
_LEAST_DEVIATION = 0.1
_GROSS = 5.0


@dataclass(frozen=True)
class CountCurve:
    """Odd, piecewise linear: `heights` (K,) at `knots` (K,) of |log step|, zero at zero."""

    knots: Array
    heights: Array

    def design(self, step: Array) -> Array:
        """(N, K): the curve at `step` (N,) is design @ heights."""
        size = np.abs(step)
        padded = np.concatenate([[0.0], self.knots])
        k = np.clip(np.searchsorted(padded, size, side="right") - 1, 0, len(padded) - 2)
        fraction = (size - padded[k]) / (padded[k + 1] - padded[k])
        out = np.zeros((len(step), len(padded)))
        rows = np.arange(len(step))
        out[rows, k] = 1.0 - fraction
        out[rows, k + 1] = fraction
        return out[:, 1:] * np.sign(step)[:, None]

    def value(self, step: Array) -> Array:
        """Count (N,) for a pixel of gain 1 in a view of scale 1."""
        return self.design(step) @ self.heights

    def slope(self, step: Array) -> Array:
        """d count / d step (N,), smoothed over one knot's width so that kinks do not trap a fit."""
        width = 0.5 * float(self.knots[0])
        return (self.value(step + width) - self.value(step - width)) / (2.0 * width)


def straight_curve(steps: Array, counts: Array) -> CountCurve:
    """A first curve: proportional to the step, over the range that `steps` reach."""
    top = float(np.percentile(np.abs(steps), 99.5)) * 1.02 + 1e-9
    knots = top * (np.arange(KNOTS) + 1.0) / KNOTS
    strong = np.abs(steps) > 0.5 * top
    ratio = np.median(counts[strong] / steps[strong]) if strong.any() else 1.0
    return CountCurve(knots, knots * float(ratio))


def smoothness(curve: CountCurve) -> Array:
    """Second differences (K, K) of the heights, the zero at the origin included: rows of a weak prior."""
    size = len(curve.knots)
    rows = np.zeros((size, size))
    for k in range(size - 1):
        rows[k, k] -= 2.0
        rows[k, k + 1] += 1.0
        if k > 0:
            rows[k, k - 1] += 1.0
    return rows


@dataclass(frozen=True)
class CountNoise:
    """Variance of a count: `floor` + `relative` count^2 + `position` (d count / d px)^2."""

    floor: float
    relative: float
    position: float

    def variance(self, count: Array, slope_px: Array) -> Array:
        """(N,) for counts (N,) and slopes (N,) per px."""
        return self.floor + self.relative * count**2 + self.position * slope_px**2


def fit_noise(residual: Array, count: Array, slope_px: Array) -> CountNoise:
    """Fit the three terms to squared residuals, gross ones left out.

    Pixels away from edges repeat almost exactly from cycle to cycle, pixels on edges do not: what counts as gross
    follows the terms, not the mean.
    """
    square = residual**2
    design = np.stack([np.ones_like(count), count**2, slope_px**2], axis=1)
    terms = np.array([np.mean(np.minimum(square, 100.0 * np.median(square) + 1e-12)), 0.0, 0.0])
    edge = slope_px > 0.1 * float(slope_px.max(initial=1e-9))
    if edge.any():
        terms[2] = float(np.median(square[edge]) / 0.455 / np.median(slope_px[edge] ** 2))
    for _ in range(8):
        variance = design @ terms
        weight = np.where(square < _GROSS**2 * variance, 1.0 / variance**2, 0.0)
        # Squared residuals scatter in proportion to their mean, hence the weights.
        terms, _ = nnls((design * weight[:, None]).T @ design, (design * weight[:, None]).T @ square)
        terms[0] = max(terms[0], _LEAST_DEVIATION**2)
    return CountNoise(*(float(t) for t in terms))
