"""Thresholds, noise and the pixel's model from curves over the step of light."""

import numpy as np
import pytest
from scipy.stats import norm

from hybridtrack.calibration import comparator_fit
from hybridtrack.calibration.comparator_fit import Comparator, fit_comparator, play, play_thresholds
from hybridtrack.calibration.comparator_kernels import EVENTS, FIRED, STEPS, half_cycle
from hybridtrack.calibration.step_curves import StepAnswers, answers_of_flips, curves
from hybridtrack.calibration.threshold_maps import threshold_maps


@pytest.fixture(autouse=True)
def few_model_pixels(monkeypatch: pytest.MonkeyPatch) -> None:
    """As many as a test has patience for."""
    monkeypatch.setattr(comparator_fit, "PLAYED_FIRST", 300)
    monkeypatch.setattr(comparator_fit, "PLAYED", 1200)


LEVELS = np.array([1.6, 1.1, 0.7, 0.4, 0.25])
STRENGTH = np.expm1(LEVELS) / np.expm1(1.6)
HALVES = (6.8e6, 6.8e6)
START = Comparator(0.3, 0.3, 0.04, 0.04, 0.015, 0.6e6, 150e3, "steps")


def light(pixels: int = 2000, views: int = 4, levels: np.ndarray = LEVELS, seed: int = 0) -> StepAnswers:
    """What `pixels` see in each of several views of three cycles a level; not yet answered."""
    random = np.random.default_rng(seed)
    order = np.tile(np.repeat(np.arange(len(levels)), 3), 3)
    step = np.concatenate([np.roll(order, 4 * view) for view in range(views)])
    strength = np.expm1(levels) / np.expm1(levels.max())
    flips = np.array([np.bincount(order, minlength=len(levels))] * views)
    count = pixels * views
    return StepAnswers(
        pixel=np.tile(np.arange(pixels), views),
        view=np.repeat(np.arange(views), pixels),
        swing=np.expm1(levels.max() + 0.03 * random.standard_normal(count)),
        flips=flips,
        answers=np.zeros((count, len(levels), 2, 3), np.int32),
        start=np.arange(views) * len(order),
        length=np.full(views, len(order)),
        strength=strength[step],
        step=step,
        step_strength=strength,
        counts=np.zeros((count, len(order), 2), np.uint8),
    )


def answered(data: StepAnswers, truth: Comparator, seed: int = 99) -> tuple[StepAnswers, np.ndarray, np.ndarray]:
    """The light of `data` as answered by pixels about `truth`, with the thresholds of each."""
    random = np.random.default_rng(seed)
    number = int(data.pixel.max()) + 1
    on = truth.on * np.exp(truth.on_spread * random.standard_normal(number))
    off = truth.off * np.exp(truth.off_spread * random.standard_normal(number))
    # Every cycle a step of its own: counts flip by flip.
    each = StepAnswers(**{**data.__dict__, "step": np.arange(len(data.step)), "step_strength": data.strength})
    played = play_thresholds(each, on[data.pixel], off[data.pixel], truth, HALVES, seed)[..., EVENTS]
    cycles = data.start[data.view][:, None] + np.arange(data.counts.shape[1])
    counts = np.take_along_axis(played, cycles[:, :, None], axis=1).astype(np.uint8)
    answers = np.zeros_like(data.answers)
    for view in np.unique(data.view):
        own, first = data.view == view, data.start[view]
        step = data.step[first : first + data.length[view]]
        answers[own] = answers_of_flips(counts[own], step, len(data.step_strength))
    return StepAnswers(**{**data.__dict__, "answers": answers, "counts": counts}), on, off


def test_events_up_and_down_make_up_for_one_another():
    """A stepping reference never strays: ON events times their threshold and OFF events times theirs stay equal to
    within one threshold each, however many cycles are played, and a step of 1.0 lets 2 or 3 of 0.3 loose."""
    data = light(200, 1, np.array([1.0]))
    quiet = Comparator(0.3, 0.28, 0.0, 0.0, 0.0, 0.0, 0.0, "steps")
    played = play_thresholds(data, np.full(200, 0.3), np.full(200, 0.28), quiet, HALVES)
    ups, downs = played[:, 0, 0, EVENTS], played[:, 0, 1, EVENTS]
    assert np.all(np.abs(0.3 * ups - 0.28 * downs) < 0.58)
    assert np.all((ups >= 2 * data.flips[0, 0]) & (ups <= 3 * data.flips[0, 0]))
    assert np.all(played[:, 0, 0, FIRED] == data.flips[0, 0])


@pytest.mark.parametrize(("excess", "tau_ns"), [(0.0, 0.0), (1.0, 0.0), (-1.0, 0.3e6), (0.5, 0.3e6)])
def test_a_settled_pixel_fires_by_the_normal_law(excess: float, tau_ns: float):
    """A step of S fires a settled pixel of threshold a with probability Phi((S - a) / noise), whatever the lag."""
    noise, threshold, tries = 0.03, 0.3, 4000
    step = threshold + excess * noise
    fired = [
        half_cycle(0.0, 0.0, step, tau_ns, 7e6, True, threshold, noise, STEPS, 150e3, seed, 0)[2] > 0
        for seed in range(1, tries + 1)
    ]
    expected = norm.cdf(excess)  # the S-curve of a comparator with normal noise
    assert abs(np.mean(fired) - expected) < 4.0 * np.sqrt(expected * (1 - expected) / tries)


@pytest.mark.parametrize("model", ["steps", "leaps", "resets"])
def test_finds_thresholds_noise_and_model(model: str):
    """From pixels of each model the fit finds which it was, thresholds to 1 % and the noise to a fifth."""
    truth = Comparator(0.34, 0.28, 0.04, 0.04, 0.02, 0.7e6, 150e3, model)
    data, _, _ = answered(light(600, 3), truth)
    fit = fit_comparator(data, START, HALVES)
    assert fit.comparator.model == model
    assert fit.comparator.on == pytest.approx(truth.on, rel=0.02)
    assert fit.comparator.off == pytest.approx(truth.off, rel=0.02)
    assert fit.comparator.noise == pytest.approx(truth.noise, rel=0.25)
    assert abs(fit.comparator.on - truth.on) < 4.0 * fit.sigma("on")
    assert fit.sigma("on") < 0.015 * truth.on


def test_maps_are_honest_and_drawn_to_the_median():
    """Each pixel's error lies within its deviation, and the spread over pixels is that of the truth."""
    truth = Comparator(0.31, 0.29, 0.05, 0.03, 0.015, 0.6e6, 150e3, "steps")
    data, on, off = answered(light(3000, 5), truth)
    maps = threshold_maps(data, fit_comparator(data, START, HALVES), HALVES, (50, 60))
    assert maps.coverage == 1.0
    for found, sigma, true, spread in ((maps.on, maps.on_sigma, on, 0.05), (maps.off, maps.off_sigma, off, 0.03)):
        error = found.ravel() - true
        assert 0.8 < np.std(error / sigma.ravel()) < 1.25
        assert np.sqrt(np.mean(error**2)) < 0.4 * np.std(true)
        assert np.std(np.log(true)) == pytest.approx(spread, rel=0.05)
    assert maps.spread == pytest.approx([0.05, 0.03], rel=0.12)


def test_pixels_never_seen_stay_unknown():
    """No number is made up where no view shows a pixel."""
    data, _, _ = answered(light(500, 3), START)
    maps = threshold_maps(data, fit_comparator(data, START, HALVES), HALVES, (30, 30))
    assert np.count_nonzero(np.isfinite(maps.on)) == 500
    assert np.array_equal(np.isfinite(maps.on), np.isfinite(maps.off_sigma))


def test_curves_of_the_same_light_agree():
    """Pixels played twice with other random numbers give the same curves within their deviations."""
    data, _, _ = answered(light(), START)
    again = curves(data, play(data, START, HALVES))
    seen = curves(data)
    assert np.allclose(again.count, seen.count, atol=0.05)
    assert np.all(np.diff(seen.count[:, 0]) < 0)
