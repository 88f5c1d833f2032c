"""Event pixels: known answers of the photoreceptor, the comparator, noise and defects."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.stats import norm

from hybridtrack.errors import OptionError, ShapeError
from hybridtrack.module import Defects
from hybridtrack.recording import Events
from hybridtrack.synthesis.event_pixels import EventPixels, PixelPhysics
from tests.synthesis.modules import small_module

QUIET = PixelPhysics(background_hz=0.0, delay_ns=0.0, tau_ns=100e3, reference_light_dn=100.0)


def exposed(pixels: EventPixels, t_ns: list[float], light: list[float]) -> Events:
    """Expose all pixels to the same light."""
    return pixels.expose(np.array(t_ns), np.repeat(np.array(light)[:, None], pixels.count, axis=1))


def flips(count: int, low: float, high: float, half_ns: float = 20e6) -> tuple[list[float], list[float]]:
    """A light that flips up and down `count` times, starting low, and rests low for one phase first."""
    t, light, level = [0.0, half_ns], [low, low], low
    for k in range(2 * count):
        level = high if k % 2 == 0 else low
        t += [(k + 1) * half_ns + 100.0, (k + 2) * half_ns]
        light += [level, level]
    return t, light


@pytest.mark.parametrize("step", [0.2, 0.3, 0.7, 1.3, 2.4])
def test_step_gives_floor_of_step_over_threshold(step: float) -> None:
    """A settled, noiseless pixel fires floor(S / threshold) ON events for a log step of S, and as many back."""
    pixels = EventPixels(small_module(), QUIET)
    t, light = flips(1, 50.0, 50.0 * np.exp(step))
    events = exposed(pixels, t, light)
    expected = int(step / 0.25)
    assert np.count_nonzero(events.on) == expected * pixels.count
    # Going back, the first threshold counts from the last reference, not from the top.
    assert np.count_nonzero(events.on == 0) == int(expected * 0.25 / 0.25 + 1e-9) * pixels.count


def test_low_pass_delay_has_closed_form() -> None:
    """The k-th event of a step is at -tau ln(1 - k theta / S), tau inversely proportional to the new light."""
    pixels = EventPixels(small_module(), QUIET)
    step, bright = 1.1, 200.0
    events = exposed(pixels, [0.0, 1e6, 1e6 + 1e-3, 30e6], [bright / np.exp(step)] * 2 + [bright] * 2)
    tau = 100e3 * 100.0 / bright
    k = np.arange(1, 5)
    expected = 1e6 - tau * np.log(1 - k * 0.25 / step)
    first_pixel = events.t[(events.x == 0) & (events.y == 0)]
    np.testing.assert_allclose(first_pixel, expected, atol=2.0)


def test_time_constant_is_bounded() -> None:
    """In the dark the time constant stops at its upper bound."""
    pixels = EventPixels(small_module(), PixelPhysics(background_hz=0.0, delay_ns=0.0, tau_max_ns=1e6))
    events = exposed(pixels, [0.0, 1e6, 1e6 + 1e-3, 50e6], [0.01, 0.01, 0.02, 0.02])
    expected = 1e6 - 1e6 * np.log(1 - 0.25 * np.arange(1, 3) / np.log(2.0))
    np.testing.assert_allclose(events.t[(events.x == 0) & (events.y == 0)], expected, atol=5.0)


def test_ramp_matches_numerical_integration() -> None:
    """Under linearly changing light the event times are those of the differential equation, integrated numerically."""
    pixels = EventPixels(small_module(), QUIET)
    low, high, t_end = 40.0, 160.0, 4e6
    events = exposed(pixels, [0.0, t_end], [low, high])

    def rate(t: float, level: np.ndarray) -> np.ndarray:
        light = low + (high - low) * t / t_end
        return (np.log(light) - level) / (100e3 * 100.0 / light)

    solution = solve_ivp(rate, (0, t_end), [np.log(low)], rtol=1e-9, atol=1e-11, max_step=5e3, dense_output=True)
    t = np.linspace(0, t_end, 400001)
    level = solution.sol(t)[0]
    expected = [np.interp(np.log(low) + 0.25 * k, level, t) for k in range(1, 6)]
    fired = events.t[(events.x == 3) & (events.y == 2)]
    assert len(fired) == 5
    # Log light is straight in sub-steps of 0.1: off by at most 0.1^2 / 8, which this ramp passes in 7 us or less.
    np.testing.assert_allclose(fired, expected, atol=8e3)


def test_splitting_the_samples_changes_nothing() -> None:
    """One call with all samples and many calls with a few give the same events."""
    module = small_module(contrast={"on_spread": 0.02, "noise_width": 0.02, "refractory_ns": 80e3})
    physics = PixelPhysics(background_hz=5.0, leak_hz=0.5)
    t, light = flips(4, 40.0, 150.0)
    whole = exposed(EventPixels(module, physics, seed=5), t, light)
    parts = EventPixels(module, physics, seed=5)
    split = Events.joined([exposed(parts, t[k : k + 3], light[k : k + 3]) for k in range(0, len(t), 3)])
    assert len(whole) > 1000
    for name in ("t", "x", "y", "on"):
        np.testing.assert_array_equal(getattr(whole, name), getattr(split, name))


def test_seed_decides_and_threads_do_not() -> None:
    """Equal seeds give equal events on one thread and on two; another seed gives others."""
    import numba

    module = small_module(contrast={"on_spread": 0.02, "noise_width": 0.03})
    t, light = flips(3, 40.0, 150.0)
    one = exposed(EventPixels(module, seed=1), t, light)
    threads = numba.get_num_threads()
    numba.set_num_threads(1)
    try:
        again = exposed(EventPixels(module, seed=1), t, light)
    finally:
        numba.set_num_threads(threads)
    other = exposed(EventPixels(module, seed=2), t, light)
    np.testing.assert_array_equal(one.t, again.t)
    np.testing.assert_array_equal(one.x, again.x)
    assert len(other) != len(one) or np.any(other.t != one.t)


def test_small_buffer_is_run_again_without_a_trace() -> None:
    """A first buffer that is too small changes nothing but the time it takes."""
    module = small_module(contrast={"on_spread": 0.02, "noise_width": 0.03, "refractory_ns": 50e3})
    t, light = flips(3, 20.0, 200.0)
    pixels, cramped = EventPixels(module, seed=1), EventPixels(module, seed=1)
    cramped._capacity = 3
    expected, received = exposed(pixels, t, light), exposed(cramped, t, light)
    np.testing.assert_array_equal(expected.t, received.t)
    np.testing.assert_array_equal(expected.on, received.on)


def test_still_light_gives_background_only() -> None:
    """Constant light leaves noise at the stated rate, half of it ON, and hot pixels at theirs."""
    module = small_module(80, 50, defects=Defects(hot=[(3, 4)], dead=[(5, 6)]))
    physics = PixelPhysics(background_hz=0.8, background_spread=0.0, hot_hz=300.0)
    events = exposed(EventPixels(module, physics, seed=3), [0.0, 4e9], [90.0, 90.0])
    hot = (events.x == 3) & (events.y == 4)
    expected = 0.8 * 4.0 * (80 * 50 - 2)
    count = np.count_nonzero(~hot)
    assert abs(count - expected) < 4 * np.sqrt(expected)
    assert abs(np.count_nonzero(hot) - 1200) < 4 * np.sqrt(1200)
    assert abs(np.count_nonzero(events.on[~hot]) - 0.5 * count) < 4 * 0.5 * np.sqrt(count)
    assert not np.any((events.x == 5) & (events.y == 6))
    assert np.all(np.diff(events.t) >= 0)


def test_leak_fires_on_events_at_its_rate() -> None:
    """Leakage alone fires ON events, `leak_hz` of them a second."""
    physics = PixelPhysics(background_hz=0.0, leak_hz=2.0)
    events = exposed(EventPixels(small_module(), physics), [0.0, 1.76e9], [90.0, 90.0])
    assert np.all(events.on == 1)
    assert len(events) == 3 * 32 * 20


@pytest.mark.parametrize("step", [0.22, 0.25, 0.28])
def test_chance_of_an_event_is_the_normal_law(step: float) -> None:
    """A small step fires with probability Phi((S - theta) / noise width): the S-curve of the stated threshold."""
    module = small_module(120, 80, contrast={"noise_width": 0.025})
    events = exposed(EventPixels(module, QUIET, seed=9), *flips(1, 80.0, 80.0 * np.exp(step)))
    pixel = np.unique((events.y.astype(int) * 120 + events.x)[events.on == 1])
    count = 120 * 80
    chance = norm.cdf((step - 0.25) / 0.025)
    assert abs(len(pixel) - chance * count) < 4 * np.sqrt(count * chance * (1 - chance))


def test_thresholds_have_the_stated_median_and_spread() -> None:
    """The maps of true thresholds follow the module's medians and spreads."""
    contrast = {"on_threshold": 0.3, "off_threshold": 0.2, "on_spread": 0.02, "off_spread": 0.01}
    module = small_module(160, 100, contrast=contrast)
    pixels = EventPixels(module, seed=4)
    assert np.median(pixels.on_threshold) == pytest.approx(0.3, abs=0.001)
    assert np.std(pixels.on_threshold) == pytest.approx(0.02, rel=0.05)
    assert np.median(pixels.off_threshold) == pytest.approx(0.2, abs=0.001)
    assert np.std(pixels.off_threshold) == pytest.approx(0.01, rel=0.05)


def test_refractory_time_spaces_events_and_steps_forget_nothing() -> None:
    """Events of a pixel keep their distance; a pixel whose reference steps makes up for the time lost."""
    step = 1.1
    free = exposed(EventPixels(small_module(), QUIET), *flips(1, 50.0, 50.0 * np.exp(step)))
    slow = EventPixels(small_module(contrast={"refractory_ns": 700e3}), QUIET)
    held = exposed(slow, *flips(1, 50.0, 50.0 * np.exp(step)))
    assert len(held) == len(free)
    one = held.t[(held.x == 1) & (held.y == 1)]
    assert np.all(np.diff(one) >= 700e3 - 1)


def test_resetting_pixel_loses_what_happens_in_its_refractory_time() -> None:
    """Tied to the photoreceptor while refractory, a pixel fires once for a step that is over by then."""
    physics = PixelPhysics(background_hz=0.0, delay_ns=0.0, tau_ns=20e3, reference="resets")
    pixels = EventPixels(small_module(contrast={"refractory_ns": 5e6}), physics)
    events = exposed(pixels, *flips(1, 50.0, 200.0))
    assert np.count_nonzero(events.on) == pixels.count
    assert np.count_nonzero(events.on == 0) == pixels.count


def test_restart_settles_at_new_light() -> None:
    """After a restart the new light is the level of rest and fires nothing."""
    pixels = EventPixels(small_module(), QUIET)
    exposed(pixels, [0.0, 1e6], [50.0, 50.0])
    pixels.restart()
    assert len(exposed(pixels, [9e6, 20e6], [200.0, 200.0])) == 0


def test_dark_light_lowers_contrast() -> None:
    """Dark current adds to light before the logarithm."""
    pixels = EventPixels(small_module(), PixelPhysics(background_hz=0.0, dark_light_dn=50.0))
    events = exposed(pixels, *flips(1, 50.0, 150.0))
    assert np.count_nonzero(events.on) == int(np.log(200 / 100) / 0.25) * pixels.count


def test_refusals() -> None:
    """What can't be simulated is refused with a sentence."""
    pixels = EventPixels(small_module())
    with pytest.raises(ShapeError, match=r"light of shape \(2, 640\), got \(2, 3\)"):
        pixels.expose(np.array([0.0, 1.0]), np.ones((2, 3)))
    with pytest.raises(ShapeError, match="do not run backwards"):
        exposed(pixels, [1.0, 0.0], [1.0, 1.0])
    with pytest.raises(OptionError, match=r"contrast\.on_threshold"):
        EventPixels(small_module().model_copy(update={"contrast": None}))
    with pytest.raises(OptionError, match="tau_ns must be positive"):
        PixelPhysics(tau_ns=0.0)
    with pytest.raises(OptionError, match="background_hz must not be negative"):
        PixelPhysics(background_hz=-1.0)
    with pytest.raises(OptionError, match="reference must be"):
        PixelPhysics(reference="other")  # type: ignore[arg-type]
    with pytest.raises(OptionError, match="tau_max_ns"):
        PixelPhysics(tau_max_ns=1.0)
