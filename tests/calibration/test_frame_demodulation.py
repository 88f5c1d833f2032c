"""Bright and dark pictures from frames: exact, honest, robust, and blank where rows tell nothing."""

import numpy as np
import pytest

from hybridtrack.calibration.frame_demodulation import RowShares, demodulate_frames, photon_transfer


def frames_of(dark, swing, share, noise=0.0, seed=0):
    """Frames D + f K with noise."""
    light = dark + share[:, :, None] * swing
    return (light + noise * np.random.default_rng(seed).standard_normal(light.shape)).astype(np.float32)


def pictures(seed=1, shape=(20, 30)):
    """A dark picture, a swing with both signs and none, and shares of 12 frames."""
    rng = np.random.default_rng(seed)
    return rng.uniform(5, 20, shape), rng.choice([0.0, 80.0, -80.0], shape), rng.uniform(0, 1, (12, shape[0]))


def test_exact_frames_give_exact_pictures():
    """Without noise both pictures come back to the precision of the frames."""
    dark, swing, share = pictures()
    result = demodulate_frames(frames_of(dark, swing, share), RowShares(share))
    assert result.dark_dn == pytest.approx(dark, abs=1e-3)
    assert result.swing_dn == pytest.approx(swing, abs=1e-3)


def test_errors_match_their_deviations():
    """Normalised errors of both pictures have unit variance under constant noise."""
    dark, swing, share = pictures(2, (60, 80))
    result = demodulate_frames(frames_of(dark, swing, share, 2.0, 3), RowShares(share))
    for error, sigma in (
        (result.dark_dn - dark, result.dark_sigma_dn),
        (result.bright_dn - dark - swing, result.bright_sigma_dn),
    ):
        assert np.std(error / sigma) == pytest.approx(1.0, abs=0.05)


def test_photon_transfer_line_is_recovered():
    """Variance against mean of Poisson light with a floor gives both constants."""
    rng = np.random.default_rng(4)
    mean = rng.uniform(2, 200, (150, 200))
    samples = rng.poisson(mean * 30.0, (12, 150, 200)) / 30.0 + 0.4 * rng.standard_normal((12, 150, 200))
    floor, slope = photon_transfer(mean, samples.var(axis=0, ddof=1))
    assert slope == pytest.approx(1 / 30.0, rel=0.05)
    assert floor == pytest.approx(0.16, abs=0.06)


def test_a_frame_from_another_picture_is_dropped():
    """A frame that overlaps a transit does not spoil the pictures."""
    dark, swing, share = pictures(5)
    light = frames_of(dark, swing, share, 0.5)
    light[7] = light[7][::-1]
    result = demodulate_frames(light, RowShares(share))
    assert not result.kept[7]
    assert np.count_nonzero(result.kept) == 11
    assert np.abs(result.dark_dn - dark).max() < 2.5


def test_rows_of_one_share_are_blank():
    """A row whose exposures all saw the same share is NaN, not a wild number."""
    dark, swing, share = pictures(6)
    share[:, 4] = 0.5
    result = demodulate_frames(frames_of(dark, swing, share, 0.5), RowShares(share))
    assert np.all(np.isnan(result.bright_dn[4]))
    assert np.all(np.isfinite(result.bright_dn[5]))


def test_saturated_samples_blank_their_pixel():
    """A pixel that saturates in some frame is left out, and its neighbours are not."""
    dark, swing, share = pictures(7)
    light = frames_of(dark, swing, share, 0.5)
    light[3, 2, 2] = np.nan
    result = demodulate_frames(light, RowShares(share))
    assert np.isnan(result.bright_dn[2, 2])
    assert np.isfinite(result.bright_dn[2, 3])
