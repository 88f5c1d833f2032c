"""Mean delays of first events, against the closed form of the photoreceptor."""

import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.synthesis.blink import Blink
from hybridtrack.synthesis.event_pixels import PixelPhysics
from hybridtrack.synthesis.latency import first_event_delays
from tests.synthesis.modules import small_module


def blink(step_dn: float) -> Blink:
    """A 50 Hz blink of one step."""
    return Blink(blink_hz=50.0, duty=0.5, epoch_ns=0.0, steps_dn=(step_dn,))


def test_delay_of_resetting_pixels_has_closed_form() -> None:
    """A pixel whose reference follows the light to rest fires after -tau ln(1 - theta / S), plus the constant delay.

    Refractory longer than the response, so that the reference of a resetting pixel is at rest before every flip.
    """
    physics = PixelPhysics(tau_ns=100e3, reference_light_dn=100.0, delay_ns=30e3, reference="resets")
    module = small_module(contrast={"refractory_ns": 8e6})
    dark, bright = 40.0, 120.0
    on, off = first_event_delays(module, physics, blink(bright - dark), dark, 0)
    step = np.log(bright / dark)
    assert on == pytest.approx(30e3 - 100e3 * 100 / bright * np.log(1 - 0.25 / step), abs=1500)
    assert off == pytest.approx(30e3 - 100e3 * 100 / dark * np.log(1 - 0.25 / step), abs=1500)


def test_delay_grows_as_light_falls() -> None:
    """Half the light doubles the part of the delay that is the photoreceptor's."""
    physics, module = PixelPhysics(delay_ns=0.0), small_module()
    bright = first_event_delays(module, physics, blink(80.0), 40.0, 0)
    dim = first_event_delays(module, physics, blink(40.0), 20.0, 0)
    assert dim[0] == pytest.approx(2 * bright[0], rel=0.03)


def test_step_below_threshold_is_refused() -> None:
    """A step that fires next to no pixel has no delay."""
    with pytest.raises(OptionError, match="fires too few event pixels"):
        first_event_delays(small_module(), PixelPhysics(), blink(5.0), 100.0, 0)
