"""Light at event pixels and in frames: known answers of motion, rolling shutter and lamps."""

import numpy as np
import pytest

from hybridtrack.synthesis.lamp import LampRecipe
from hybridtrack.synthesis.view import Optics, View, frame_channels
from tests.synthesis.panels import seeing_module, sine_panel, sliding, step_panel

OPTICS = Optics(0.4, 0.0)
STEADY = LampRecipe(white_dn=100.0)


def edge_places(light: np.ndarray, dark: float, bright: float) -> np.ndarray:
    """Where each row (rows, columns) turns from dark to bright, in its own pixels."""
    return ((bright - light) / (bright - dark)).sum(axis=1) - 0.5


def test_rolling_shutter_slants_an_upright_edge() -> None:
    """Under v px/s an upright edge moves by v times the line time from row to row; read upwards, the other way."""
    speed, line_ns, exposure = 2000.0, 30e3, 2e6
    view = View(step_panel(), seeing_module(binning=1), sliding(speed), STEADY, OPTICS)
    motion = view.motion(-2e7, 2e7)
    rows = np.arange(96)
    for starts, sign in ((line_ns * rows, 1.0), (line_ns * rows[::-1], -1.0)):
        places = edge_places(view.frame_light(motion, starts, exposure, exposure), 20.0, 80.0)
        slope, _ = np.polyfit(rows, places, 1)
        assert slope == pytest.approx(sign * speed * line_ns * 1e-9, rel=5e-3)
        expected = 79.5 + speed * 1e-9 * (starts + 0.5 * exposure)
        np.testing.assert_allclose(places, expected, atol=0.05)


def test_blur_is_speed_times_exposure() -> None:
    """An edge is smeared evenly over v times the exposure: the variance of its slope grows by (v e)^2 / 12."""
    speed, exposure = 2000.0, 4e6
    view = View(step_panel(), seeing_module(binning=1), sliding(speed), STEADY, OPTICS)
    motion = view.motion(-2e7, 2e7)

    def variance(exposure_ns: float) -> float:
        line = view.frame_light(motion, np.zeros(96), exposure_ns, exposure_ns).mean(axis=0)
        slope, u = np.diff(line), np.arange(159)
        mean = (slope * u).sum() / slope.sum()
        return float((slope * (u - mean) ** 2).sum() / slope.sum())

    extra = variance(exposure) - variance(1.0)
    assert np.sqrt(12 * extra) == pytest.approx(speed * exposure * 1e-9, rel=0.02)


def test_brightness_follows_true_exposure() -> None:
    """A frame whose true exposure is a tenth longer than stamped is a tenth brighter."""
    view = View(step_panel(), seeing_module(), sliding(0.0), STEADY, OPTICS)
    motion = view.motion(0.0, 2e7)
    light = view.frame_light(motion, np.zeros(48), 4.4e6, 4e6)
    assert light[:, -20:].mean() == pytest.approx(0.8 * 100 * 1.1, rel=1e-3)


def test_pulsed_lamps_band_a_frame() -> None:
    """Each row of a still scene shows the lamp's exact integral over its own exposure."""
    lamp = LampRecipe(kind="pulsed", rate_hz=500.0, duty=0.4, edge_us=20.0, daylight=0.2, white_dn=100.0)
    view = View(step_panel(), seeing_module(), sliding(0.0), lamp, OPTICS)
    motion = view.motion(0.0, 2e7)
    starts, exposure = 40e3 * np.arange(48), 0.9e6
    light = view.frame_light(motion, starts, exposure, exposure)[:, -20:].mean(axis=1)
    expected = 80.0 * (lamp.integral_ns(starts + exposure) - lamp.integral_ns(starts)) / exposure
    np.testing.assert_allclose(light, expected, rtol=1e-4)


def test_event_light_is_that_of_each_pixels_own_place() -> None:
    """On a moving sine the light at every event pixel is the damped sine at its place and time."""
    speed, period = 700.0, 24.0
    module = seeing_module()
    view = View(sine_panel(period, 8.0), module, sliding(speed), STEADY, OPTICS)
    motion = view.motion(0.0, 2e7)
    u = module.event_pixel_positions().reshape(-1, 2)[:, 0]
    damped = 30.0 * np.exp(-2 * (np.pi / period) ** 2 * (1 / 12 + 0.16))
    blocks = list(view.event_light(motion, 0.0, 2e7))
    for t, light in blocks:
        expected = 50.0 + damped * np.sin(2 * np.pi * (u - 79.5 - speed * t[:, None] * 1e-9) / period)
        np.testing.assert_allclose(light, expected, atol=0.15)
    times = np.concatenate([t for t, _ in blocks])
    assert times[0] == 0.0
    assert times[-1] == 2e7
    assert np.all(np.diff(times) >= 0)
    assert np.diff(times).max() * speed * 1e-9 <= 0.5 * 1.05


def test_event_light_holds_the_lamps_turning_points() -> None:
    """Under flicker the light at a still pixel follows the lamps between and at the samples."""
    lamp = LampRecipe(kind="flicker", rate_hz=100.0, depth=0.3, daylight=0.0, white_dn=100.0)
    view = View(step_panel(), seeing_module(), sliding(0.0), lamp, OPTICS)
    blocks = list(view.event_light(view.motion(0.0, 3e7), 0.0, 3e7))
    t = np.concatenate([times for times, _ in blocks])
    bright = np.concatenate([light[:, 39] for _, light in blocks])
    fine = np.linspace(0, 3e7, 5000)
    np.testing.assert_allclose(np.interp(fine, t, bright), 80.0 * lamp.level(fine), rtol=0.006)


def test_vignetting_darkens_the_corners() -> None:
    """With a fall-off of 0.2 a pixel at half the diagonal has 0.8 of the light."""
    view = View(sine_panel(1e6), seeing_module(), sliding(0.0), STEADY, Optics(0.4, 0.2))
    sharp = view.sharp_light(0.0)
    assert sharp[0, 0] / sharp[24, 40] == pytest.approx(0.8, abs=0.01)


def test_mosaic_letters_become_channels() -> None:
    """A mosaic's letters name channels, and clear sites are clear where frames include them."""
    module = seeing_module(binning=1)
    mode = module.frame_mode.model_copy(update={"mosaic": "RGGB"})
    channels = frame_channels(module.model_copy(update={"frame_mode": mode}))
    assert channels is not None
    picture = channels.reshape(mode.shape)
    assert picture[:2, :2].tolist() == [[1, 2], [2, 3]]
    assert picture[1, 2] == 0  # the clear site of the small module
    assert frame_channels(module) is None
