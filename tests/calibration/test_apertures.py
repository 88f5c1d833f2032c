"""Quadrature of pixel apertures."""

import numpy as np
import pytest

from hybridtrack.calibration.apertures import frame_aperture, one_pixel_aperture
from hybridtrack.module import Cluster, FrameMode, frame_pixel_centres

CLUSTER = Cluster(width=4, height=4, clear_site=(2, 1))


def test_one_pixel_aperture_averages_its_box():
    """Weights sum to one and second moments are those of a box one pixel wide."""
    aperture = one_pixel_aperture((7,))
    assert aperture.kind.shape == (7,)
    assert aperture.weights.sum() == pytest.approx(1.0)
    np.testing.assert_allclose(aperture.weights[0] @ aperture.nodes**2, 1 / 12)


@pytest.mark.parametrize("clear", ["included", "filled", "omitted"])
@pytest.mark.parametrize("crop", [(0, 0), (3, 2)])
def test_mean_position_of_a_bin_is_the_frame_modes(clear, crop):
    """The aperture's mean position is where the frame mode says the light of the pixel comes from."""
    mode = FrameMode(width=20, height=12, binning=2, crop=crop, clear_in_frame=clear)
    aperture = frame_aperture(mode, CLUSTER)
    columns, rows = np.meshgrid(np.arange(20), np.arange(12))
    full = mode.colour_from_frame(np.stack([columns, rows], axis=-1))
    mean = full + (aperture.weights @ aperture.nodes)[aperture.kind]
    np.testing.assert_allclose(mean, frame_pixel_centres(mode, CLUSTER), atol=1e-12)
    np.testing.assert_allclose(aperture.weights.sum(1), 1.0)


def test_binning_by_one_keeps_a_filled_clear_site_in_place():
    """A bin of nothing but a clear site must have been filled: its aperture is its own pixel."""
    mode = FrameMode(width=8, height=8, binning=1, clear_in_frame="omitted")
    aperture = frame_aperture(mode, CLUSTER)
    np.testing.assert_allclose(aperture.weights @ aperture.nodes, 0.0, atol=1e-12)


def test_a_filled_site_looks_at_the_four_beside_it():
    """A quarter of its share each; the bin's second moment grows, its mean does not move."""
    mode = FrameMode(width=8, height=8, binning=1, clear_in_frame="filled")
    aperture = frame_aperture(mode, CLUSTER)
    weights = aperture.weights[aperture.kind[1, 2]]
    for offset, share in (((0, 0), 0.0), ((1, 0), 0.25), ((0, -1), 0.25), ((1, 1), 0.0)):
        near = np.all(np.abs(aperture.nodes - offset) < 0.5, axis=1)
        assert weights[near].sum() == pytest.approx(share)
