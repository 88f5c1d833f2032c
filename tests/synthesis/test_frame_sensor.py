"""Frames from light: clear sites, binning, mosaic, noise and response."""

import numpy as np
import pytest

from hybridtrack.errors import OptionError, ShapeError
from hybridtrack.module import Cluster, ColourArray, FrameMode
from hybridtrack.synthesis.frame_sensor import FrameSensor, SensorPhysics, fill_clear_sites
from tests.synthesis.modules import small_module

QUIET = SensorPhysics(electrons_per_dn=1e9, read_noise_e=0.0)


def sensor(
    physics: SensorPhysics = QUIET, cluster: Cluster | None = None, seed: int = 0, **mode: object
) -> FrameSensor:
    """A sensor of 128 x 80 colour pixels."""
    fields = {"width": 64, "height": 40, "binning": 2, **mode}
    parts = {"frame_mode": FrameMode(**fields), "colour_array": ColourArray(width=128, height=80)}  # type: ignore[arg-type]
    if cluster is not None:
        parts["cluster"] = cluster
    return FrameSensor(small_module(**parts), physics, seed)


def ramp() -> np.ndarray:
    """Light that is linear in position: 20 + 0.5 u + 0.25 v."""
    u, v = np.meshgrid(np.arange(128.0), np.arange(80.0))
    return 20.0 + 0.5 * u + 0.25 * v


@pytest.mark.parametrize("electrons", [5.0, 30.0])
@pytest.mark.parametrize("mean_dn", [4.0, 60.0, 150.0])
def test_variance_over_mean_is_the_photon_transfer_line(electrons: float, mean_dn: float) -> None:
    """Variance is mean / electrons_per_dn + read noise + quantisation (Janesick 2007; EMVA 1288)."""
    physics = SensorPhysics(electrons_per_dn=electrons, read_noise_e=0.7 * electrons)
    frames = sensor(physics, black_dn=20.0, width=128, height=80, binning=1)
    images = np.stack([frames.record(np.full((80, 128), mean_dn), number) for number in range(40)]).astype(float)
    expected = mean_dn / electrons + 0.7**2 + 1.0 / 12.0
    count = images.size
    assert images.mean() == pytest.approx(20.0 + mean_dn, abs=5 * np.sqrt(expected / count))
    assert images.var() == pytest.approx(expected, rel=0.01)


def test_noise_is_of_the_frame_and_the_seed() -> None:
    """The same seed and number draw the same noise, others draw others; neighbours are independent."""
    physics, light = SensorPhysics(), np.full((40, 64), 90.0)
    one, other = sensor(physics, seed=1), sensor(physics, seed=2)
    np.testing.assert_array_equal(one.record(light, 3), sensor(physics, seed=1).record(light, 3))
    assert np.mean(one.record(light, 3) == one.record(light, 4)) < 0.5
    assert np.mean(one.record(light, 3) == other.record(light, 3)) < 0.5
    noise = np.concatenate([one.record(light, k).astype(float) - 90.0 for k in range(30)])
    for shift in ((0, 1), (1, 0)):
        assert abs(np.corrcoef(noise.ravel(), np.roll(noise, shift, (0, 1)).ravel())[0, 1]) < 0.02


def test_included_bin_is_the_mean_of_all_its_pixels() -> None:
    """With clear sites included a bin shows linear light at its full centre."""
    frames = sensor()
    centres = frames.module.frame_pixel_centres()
    expected = 20.0 + 0.5 * centres[..., 0] + 0.25 * centres[..., 1]
    np.testing.assert_allclose(frames.light_from_colour(ramp()), expected, atol=1e-9)


def test_omitted_bin_shows_light_where_the_module_says() -> None:
    """With clear sites omitted a bin shows linear light at the mean of what is left, 1/6 px off on each axis."""
    frames = sensor(clear_in_frame="omitted")
    centres = frames.module.frame_pixel_centres()
    expected = 20.0 + 0.5 * centres[..., 0] + 0.25 * centres[..., 1]
    np.testing.assert_allclose(frames.light_from_colour(ramp()), expected, atol=1e-9)
    off = centres - frames.module.frame_mode.colour_from_frame(np.stack(np.meshgrid(np.arange(64), np.arange(40)), -1))
    assert np.abs(off).max() == pytest.approx(1 / 6)


@pytest.mark.parametrize("binning", [1, 2])
def test_filled_bin_does_not_see_its_clear_site(binning: int) -> None:
    """With clear sites filled their own light plays no part, and linear light comes out at the full centre."""
    frames = sensor(clear_in_frame="filled", binning=binning, width=128 // binning, height=80 // binning)
    light = ramp()
    expected = frames.module.frame_pixel_centres() @ [0.5, 0.25] + 20.0
    np.testing.assert_allclose(frames.light_from_colour(light)[1:-1, 1:-1], expected[1:-1, 1:-1], atol=1e-9)
    light[1::4, 2::4] = 1e6
    np.testing.assert_allclose(frames.light_from_colour(light)[1:-1, 1:-1], expected[1:-1, 1:-1], atol=1e-9)


def test_single_clear_pixels_that_are_omitted_are_filled() -> None:
    """Unbinned frames have nothing to show at an omitted clear site but its neighbours."""
    filled, omitted = (sensor(clear_in_frame=how, binning=1, width=128, height=80) for how in ("filled", "omitted"))
    np.testing.assert_array_equal(filled.light_from_colour(ramp()), omitted.light_from_colour(ramp()))


def test_crop_shifts_the_bins() -> None:
    """A cropped frame starts at its crop."""
    frames = sensor(crop=(6, 10), width=50, height=30)
    expected = frames.module.frame_pixel_centres() @ [0.5, 0.25] + 20.0
    np.testing.assert_allclose(frames.light_from_colour(ramp()), expected, atol=1e-9)


def test_mosaic_fills_from_its_own_filter() -> None:
    """In a mosaic a clear site is filled from pixels of the filter that the mosaic has there."""
    light = np.ones((8, 8))
    letters = np.tile(np.array([list("RG"), list("GB")]), (4, 4))
    light[letters == "R"] = 7.0
    filled = fill_clear_sites(light, Cluster(width=4, height=4, clear_site=(2, 2)), letters)
    assert filled[2, 2] == 7.0


def test_mosaic_gains_and_clear_pixel() -> None:
    """Each filter has its gain; an included clear pixel has that of W."""
    gains = {"R": 0.5, "G": 1.0, "B": 0.25, "W": 1.5}
    physics = SensorPhysics(electrons_per_dn=1e9, read_noise_e=0.0, channel_gain=gains)
    frames = sensor(physics, mosaic="RGGB", binning=1, width=128, height=80)
    image = frames.record(np.full((80, 128), 100.0), 0)
    assert (image[0, 0], image[0, 1], image[1, 0], image[1, 1]) == (50, 100, 100, 25)
    assert image[1, 2] == 150


def test_gamma_response_and_sixteen_bits() -> None:
    """Gamma frames keep black and white and lift the middle; more than 255 DN needs uint16."""
    frames = sensor(response="gamma", black_dn=64.0, white_dn=1023.0)
    image = frames.record(np.full((40, 64), 0.25 * 959.0), 0)
    assert image.dtype == np.uint16
    assert image[0, 0] == round(64 + 959 * 0.25 ** (1 / 2.2))
    assert frames.record(np.full((40, 64), 5000.0), 0).max() == 1023
    assert frames.record(np.zeros((40, 64)), 0).max() == 64


def test_full_well_limits_light() -> None:
    """No more electrons than the well holds."""
    physics = SensorPhysics(electrons_per_dn=10.0, read_noise_e=0.0, full_well_e=1000.0)
    assert sensor(physics).record(np.full((40, 64), 200.0), 0).max() == 100


def test_refusals() -> None:
    """Wrong shapes, unknown filters and impossible bins are refused."""
    frames = sensor()
    with pytest.raises(ShapeError, match=r"colour array's shape \(80, 128\), got \(2, 2\)"):
        frames.light_from_colour(np.ones((2, 2)))
    with pytest.raises(ShapeError, match=r"frame's shape \(40, 64\), got \(2, 2\)"):
        frames.record(np.ones((2, 2)), 0)
    with pytest.raises(OptionError, match="lacks 'X'"):
        sensor(mosaic="XGGB")
    with pytest.raises(OptionError, match="square such as"):
        sensor(mosaic="RGB")
    with pytest.raises(OptionError, match="hold nothing else"):
        all_clear = Cluster(width=1, height=1, clear_site=(0, 0))
        sensor(cluster=all_clear, clear_in_frame="omitted").light_from_colour(ramp())
    with pytest.raises(OptionError, match="electrons_per_dn"):
        SensorPhysics(electrons_per_dn=0.0)
