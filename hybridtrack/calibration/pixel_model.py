"""What a pixel's reference does after an event, read from mean counts N over the size S of the step of light.

    "steps"    it moves by one threshold an event:      N_on = S / a - kappa (1 + r),  r = N_on / N_off,  kappa ~ 1/2
    "leaps"    it jumps to the level reached:           N_on = S / a - k,  k free, smaller
    "resets"   it follows the light while the pixel is dead after an event: N falls behind as S grows

Straight lines and their intercepts tell the first two apart where N is large enough for hysteresis to average out and S
varies enough; a shortfall at the largest steps against the smallest tells the third. Where steps are alike the first is
taken, and the deviation covers the second.
"""

from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

Array = np.ndarray

KAPPA = 0.485
KAPPA_SIGMA = 0.05
LEAST_COUNT = 1.5  # events a flip below which hysteresis locks in and the mean count says little
SHORTFALL = 0.2
RANGE = 1.35  # largest over smallest step that tells models apart
BETTER = 12.0  # gain in chi-square that a free intercept must bring
RESETS_DEVIATION = 0.1


@dataclass(frozen=True)
class CountCurve:
    """Mean counts over the size of the step: all (B,)."""

    step: Array
    on: Array
    off: Array
    number: Array


class Counts(Protocol):
    """Anything with mean events a flip."""

    @property
    def on(self) -> Array: ...

    @property
    def off(self) -> Array: ...


@dataclass(frozen=True)
class ModelChoice:
    """The model's name, the `relative` deviation of thresholds that it leaves, findings, and for "leaps" the part of a
    threshold left over after a burst up and down (ON, OFF)."""

    model: str
    relative: float
    findings: list[str] = field(default_factory=list)
    left: tuple[float, float] | None = None

    def on_left(self, counts: Counts) -> Array:
        """What must be added to the ON count, in thresholds, to make it the step."""
        if self.left is not None:
            return np.full_like(counts.on, self.left[0])
        return KAPPA * (1.0 + counts.on / counts.off)

    def off_left(self, counts: Counts) -> Array:
        """What must be added to the OFF count, in thresholds, to make it the step."""
        if self.left is not None:
            return np.full_like(counts.off, self.left[1])
        return KAPPA * (1.0 + counts.off / counts.on)


def usable_part(curve: CountCurve) -> CountCurve:
    """The bins with enough events."""
    chosen = (curve.on > LEAST_COUNT) & (curve.off > LEAST_COUNT)
    return CountCurve(curve.step[chosen], curve.on[chosen], curve.off[chosen], curve.number[chosen])


def stepped_thresholds(curve: CountCurve) -> tuple[Array, Array]:
    """ON and OFF thresholds (B,) of every bin by the first model."""
    return (
        curve.step / (curve.on + KAPPA * (1.0 + curve.on / curve.off)),
        curve.step / (curve.off + KAPPA * (1.0 + curve.off / curve.on)),
    )


def shortfall(curve: CountCurve) -> float:
    """By what part counts at the largest step miss what the smallest third of the usable steps predicts."""
    small = slice(0, max(1, len(curve.step) // 3))
    worst = 0.0
    for threshold, number, other in zip(
        stepped_thresholds(curve), (curve.on, curve.off), (curve.off, curve.on), strict=True
    ):
        expected = curve.step[-1] / threshold[small].mean() - KAPPA * (1.0 + number[-1] / other[-1])
        worst = max(worst, 1.0 - float(number[-1] / max(expected, 1e-9)))
    return worst


def lost_at_smallest(curve: CountCurve) -> float:
    """Relative deviation of thresholds from the smallest steps, where events may be lost already.

    Thresholds by the first model rise with the step as more is lost; carried on in a straight line to a step of one
    threshold, where nothing can be, they give what the smallest steps may be off by.
    """
    worst = 0.0
    for threshold in stepped_thresholds(curve):
        half = slice(0, max(3, len(threshold) // 2))
        slope, start = np.polyfit(curve.step[half], threshold[half], 1)
        at_one = start / max(1.0 - slope, 0.2)
        worst = max(worst, abs(float(threshold[0] - at_one)) / float(threshold[0]))
    return worst


@dataclass(frozen=True)
class _Line:
    """Least squares of N = S / a - k: `threshold` a, `left` k, relative deviation of a, chi-square, that of the model
    with its intercept given."""

    threshold: float
    left: float
    relative: float
    chi_square: float
    held_chi_square: float


def fit_line(step: Array, number: Array, held_left: Array) -> _Line:
    """Fit one polarity's bins; their counts are trusted to 2 % and 0.06 of an event."""
    weight = 1.0 / np.hypot(0.02 * number, 0.06)
    design = np.column_stack([step, -np.ones_like(step)]) * weight[:, None]
    (slope, left), *_ = np.linalg.lstsq(design, number * weight, rcond=None)
    covariance = np.linalg.inv(design.T @ design)
    free = float(np.sum(((slope * step - left - number) * weight) ** 2))
    held_slope = np.sum(step * (number + held_left) * weight**2) / np.sum((step * weight) ** 2)
    held = float(np.sum(((held_slope * step - held_left - number) * weight) ** 2))
    inflate = max(1.0, free / max(len(step) - 2, 1))
    return _Line(float(1.0 / slope), float(left), float(np.sqrt(covariance[0, 0] * inflate) / abs(slope)), free, held)


def choose_leaps(curve: CountCurve) -> ModelChoice | None:
    """The second model where straight lines with free intercepts fit far better than the first, and make sense."""
    if len(curve.step) < 4:
        return None
    ratio = curve.on / curve.off
    up = fit_line(curve.step, curve.on, KAPPA * (1.0 + ratio))
    down = fit_line(curve.step, curve.off, KAPPA * (1.0 + 1.0 / ratio))
    better = up.held_chi_square + down.held_chi_square - up.chi_square - down.chi_square
    sensible = min(up.threshold, down.threshold) > 0 and all(-0.2 < line.left < 1.4 for line in (up, down))
    if better < BETTER or not sensible:
        return None
    return ModelChoice(
        "leaps",
        max(up.relative, down.relative),
        ["counts over the size of the step are straight, with less left over after a burst than a stepping reference "
         "leaves: thresholds come from the slope"],
        (up.left, down.left),
    )  # fmt: skip


def choose_model(curve: CountCurve, inside: CountCurve) -> ModelChoice:
    """Choose the pixel's model from a curve with at least one bin that has enough events.

    `inside` is the part of it from well inside squares: where its own steps vary enough it alone decides about the
    first two models, for near edges the steps rest on a model of the blur.
    """
    usable = usable_part(curve)
    if not len(usable.step):
        usable = curve
    on, off = (float(np.median(threshold)) for threshold in stepped_thresholds(usable))
    middle = float(np.average(usable.step, weights=usable.number))
    hysteresis = KAPPA_SIGMA * (on + off) / middle
    if len(usable.step) < 3 or usable.step.max() < RANGE * usable.step.min():
        # A leaping reference leaves half a threshold of its own, instead of half of both.
        between = 0.5 * KAPPA * (on + off) / middle
        return ModelChoice(
            "steps",
            float(np.hypot(hysteresis, 0.6 * between)),
            ["steps of light are too alike to tell the pixel's model from counts: thresholds rest on a reference that "
             "moves by one threshold an event"],
        )  # fmt: skip
    if shortfall(usable) > SHORTFALL:
        return ModelChoice(
            "resets",
            float(np.hypot(lost_at_smallest(usable), RESETS_DEVIATION)),
            ["counts fall behind as steps grow: the pixels lose what happens in their refractory time, and thresholds "
             "are taken from the smallest steps alone"],
        )  # fmt: skip
    own = usable_part(inside)
    varied = len(own.step) >= 4 and own.step.max() > RANGE * own.step.min()
    usable = own if varied else usable
    leaps = choose_leaps(usable)
    if leaps is not None:
        return leaps
    scatter = max(float(np.std(t) / np.mean(t)) for t in stepped_thresholds(usable))
    return ModelChoice("steps", float(np.hypot(hysteresis, 0.5 * scatter)))
