"""Thresholds from counts: comparators of several kinds, steps alike and unlike, and refusals."""

import numpy as np
import pytest

from hybridtrack.calibration.contrast import StepCounts, fit_thresholds

SHAPE = (60, 100)


def cycle_counts(step, on, off, kind, cycles=40, seed=0):
    """Mean ON and OFF events a cycle (M,) of comparators that blink by `step` (M,).

    `kind`: "steps" moves the reference by a threshold an event, "leaps" to the level reached, "dead" loses a third of
    what is left after every event.
    """
    rng = np.random.default_rng(seed)
    level = np.zeros(len(step))
    reference = -off * rng.uniform(0, 1, len(step))
    total = np.zeros((2, len(step)))
    for cycle in range(cycles + 6):
        for k, (target, threshold, sign) in enumerate(((step, on, 1.0), (np.zeros_like(step), off, -1.0))):
            level = target
            count = np.zeros(len(step))
            for _ in range(40):
                noisy = threshold * (1.0 + 0.04 * rng.standard_normal(len(step)))
                fires = sign * (level - reference) > noisy
                if not fires.any():
                    break
                count += fires
                if kind == "leaps":
                    # All events of the burst at once, then the reference stands at the level reached.
                    count += fires * (np.floor(np.abs(level - reference) / threshold) - 1.0).clip(0)
                    reference = np.where(fires, level, reference)
                elif kind == "dead":
                    left = sign * (level - reference) - threshold
                    reference = np.where(fires, reference + sign * (threshold + 0.33 * np.maximum(left, 0)), reference)
                else:
                    reference = np.where(fires, reference + sign * threshold, reference)
            if cycle >= 6:
                total[k] += count
    return total / cycles


def observations(kind, low, high, views=4, on=0.27, off=0.33, spread=0.04, seed=1):
    """Step counts of pixels with mismatched thresholds over several views."""
    rng = np.random.default_rng(seed)
    size = SHAPE[0] * SHAPE[1]
    a, b = on * (1 + spread * rng.standard_normal(size)), off * (1 + spread * rng.standard_normal(size))
    parts = []
    for view in range(views):
        pixel = rng.choice(size, size // 3, replace=False)
        step = rng.uniform(low, high, len(pixel))
        up, down = cycle_counts(step, a[pixel], b[pixel], kind, seed=seed + view)
        parts.append((pixel, np.full(len(pixel), view), step, up, down, np.ones(len(pixel), bool)))
    return StepCounts(*(np.concatenate(column) for column in zip(*parts, strict=True)))


@pytest.mark.parametrize(("low", "high"), [(1.2, 1.3), (0.8, 2.6), (2.5, 3.0)])
def test_stepping_references_give_their_thresholds(low, high):
    """Hysteresis and all, medians are right to 3 % and within three deviations, the spread to a third."""
    fit = fit_thresholds(observations("steps", low, high), SHAPE)
    assert fit.model == "steps"
    assert fit.on == pytest.approx(0.27, rel=0.03)
    assert fit.off == pytest.approx(0.33, rel=0.03)
    assert abs(fit.on - 0.27) < 3 * fit.on_sigma
    assert fit.on_spread / fit.on == pytest.approx(0.04, rel=0.35)


def test_dividing_step_by_count_would_be_wrong():
    """The naive ratio on the same data is off by more than a tenth: the hysteresis must be modelled."""
    counts = observations("steps", 1.2, 1.3)
    assert np.median(counts.step / counts.on) / 0.27 > 1.1


def test_pixels_that_lose_events_are_recognised():
    """Counts that fall behind as steps grow name the other model, with a wider deviation that covers the error."""
    fit = fit_thresholds(observations("dead", 0.5, 3.2), SHAPE)
    assert fit.model == "resets"
    assert any("fall behind" in finding for finding in fit.findings)
    assert abs(fit.on - 0.27) < 3 * fit.on_sigma
    assert fit.on_sigma > 0.1 * fit.on


def test_leaping_references_are_told_by_their_slope():
    """A reference that jumps to the level reached leaves less over; steps of several sizes show it."""
    fit = fit_thresholds(observations("leaps", 0.8, 2.6), SHAPE)
    assert fit.model == "leaps"
    assert fit.on == pytest.approx(0.27, rel=0.03)
    assert fit.off == pytest.approx(0.33, rel=0.03)
    assert abs(fit.on - 0.27) < 3 * fit.on_sigma


def test_steps_all_alike_widen_the_deviation():
    """With one size of step the pixel model can't be tested; the finding says so and the deviation is wider."""
    alike, various = (fit_thresholds(observations("steps", *r), SHAPE) for r in ((1.24, 1.26), (0.8, 2.6)))
    assert any("too alike" in finding for finding in alike.findings)
    assert not any("too alike" in finding for finding in various.findings)
    assert alike.on_sigma > various.on_sigma


def test_too_few_events_are_refused():
    """Steps below the threshold give no number and one sentence."""
    fit = fit_thresholds(observations("steps", 0.1, 0.2, views=2), SHAPE)
    assert fit.on is None
    assert fit.off is None
    assert "contrast thresholds cannot be told" in fit.findings[0]
