"""Frames as linear light: black, gamma, colour, mosaic, saturation."""

import numpy as np
import pytest
from ideal_board import small_module

from hybridtrack.calibration.frame_light import linear_dn, mosaic_gains, mosaic_period
from hybridtrack.module import FrameMode


def mode(**changes):
    """A small frame mode."""
    return FrameMode(**({"width": 4, "height": 2, "black_dn": 10.0} | changes))


def test_black_is_taken_off_and_white_is_unknown():
    """Values count from black; what reaches white is NaN."""
    image = np.array([[10, 20, 254, 255]], np.uint8)
    assert linear_dn(image, mode())[0, :3] == pytest.approx([0, 10, 244])
    assert np.isnan(linear_dn(image, mode())[0, 3])


def test_gamma_is_undone():
    """A response of 1/2.2 gives back light in proportion."""
    light = np.array([[5.0, 50.0, 120.0, 200.0]])
    image = np.rint(245.0 * (light / 245.0) ** (1 / 2.2) + 10.0).astype(np.uint8)
    assert linear_dn(image, mode(response="gamma")) == pytest.approx(light, rel=0.03)


def test_colours_are_averaged_in_linear_light():
    """Three channels give their mean after the response is undone."""
    image = np.array([[[12, 14, 16]]], np.uint8)
    assert linear_dn(image, mode())[0, 0] == pytest.approx(4.0)


def test_mosaic_phases_come_to_one_level():
    """Under even light the gains make all phases alike, clear sites in the mosaic included."""
    module = small_module(frame_mode=FrameMode(width=480, height=320, mosaic="RGGB"))
    assert mosaic_period(module) == (4, 4)
    gains = np.random.default_rng(0).uniform(0.5, 1.5, (4, 4))
    light = np.tile(100.0 * gains, (2, 5, 5))[:2]
    assert light.shape == (2, 20, 20) or light.ndim == 3
    levelled = light * np.tile(mosaic_gains(light, (4, 4)), (5, 5))
    assert np.ptp(levelled) < 1e-9
