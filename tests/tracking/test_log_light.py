"""From frame numbers to log light."""

import numpy as np
import pytest
from planar_scene import small_module

from hybridtrack.errors import ModuleMismatchError
from hybridtrack.module import HybridModule
from hybridtrack.tracking.log_light import LogLightReader


def with_mode(module: HybridModule, **changes: object) -> HybridModule:
    return module.model_copy(update={"frame_mode": module.frame_mode.model_copy(update=changes)})


def test_levels_are_taken_off_before_the_logarithm() -> None:
    """A picture of light k has log k, whatever black and white levels and gamma it was stored with."""
    light = np.linspace(0.05, 0.9, 160 * 240).reshape(160, 240)
    for response, power in (("linear", 1.0), ("gamma", 1.0 / 2.2)):
        module = with_mode(small_module(), black_dn=1000.0, white_dn=61000.0, response=response)
        stored = np.rint(1000.0 + 60000.0 * light**power).astype(np.uint16)
        read = LogLightReader(module).read(stored)
        np.testing.assert_allclose(read.log_light, np.log(light), atol=3e-3)


def test_a_mosaic_of_grey_is_grey() -> None:
    """The pattern of a mosaic vanishes: coloured uniform light reads as one value everywhere, in any phase."""
    for mosaic in ("RGGB", "GRBG"):
        module = with_mode(small_module(), mosaic=mosaic)
        rows, columns = np.indices(module.frame_mode.shape)
        level = np.choose((rows % 2) * 2 + columns % 2, [{"R": 40, "G": 120, "B": 80}[c] for c in mosaic])
        read = LogLightReader(module).read(level.astype(np.uint8)).log_light[2:-2, 2:-2]
        np.testing.assert_allclose(read, np.log(90.0 / 255.0), atol=1e-5)


def test_omitted_clear_sites_do_not_move_the_picture() -> None:
    """Where a bin's light lies off its centre because the clear site is left out, light stays where it is."""
    module = with_mode(small_module(), clear_in_frame="omitted", white_dn=65535.0)

    def waves(uv: np.ndarray) -> np.ndarray:
        return -1.5 + 0.4 * np.sin(2 * np.pi * uv[..., 0] / 40) + 0.4 * np.cos(2 * np.pi * uv[..., 1] / 32)

    as_stored = waves(module.frame_pixel_centres())
    columns, rows = np.meshgrid(np.arange(240), np.arange(160))
    truth = waves(module.frame_mode.colour_from_frame(np.stack([columns, rows], axis=-1)))
    read = LogLightReader(module).read(np.rint(65535.0 * np.exp(as_stored)).astype(np.uint16)).log_light
    assert np.abs(as_stored - truth).max() > 0.01
    assert np.abs(read - truth)[2:-2, 2:-2].max() < 0.15 * np.abs(as_stored - truth).max()


def test_saturation_is_not_trusted() -> None:
    """Pixels at the white level have no trust, others next to them keep theirs, dark ones have little."""
    image = np.full((160, 240), 128, np.uint8)
    image[50, 60], image[90, 90] = 255, 0
    trust = LogLightReader(small_module()).read(image).trust
    assert trust[50, 60] == 0.0
    assert trust[50, 62] > 0.9
    assert trust[90, 90] < 0.1


def test_colour_pictures_are_read_and_other_sizes_refused() -> None:
    """RGB becomes grey light; a picture that is not the module's size is refused."""
    reader = LogLightReader(small_module())
    colour = np.full((160, 240, 3), (40, 120, 80), np.uint8)
    np.testing.assert_allclose(reader.read(colour).log_light, np.log(90.0 / 255.0), atol=1e-5)
    with pytest.raises(ModuleMismatchError, match=r"pictures of 240x160 px .* got an array of shape \(100, 240\)"):
        reader.read(np.zeros((100, 240), np.uint8))
