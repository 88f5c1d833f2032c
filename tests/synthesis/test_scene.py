"""Scenes: textures, boxes, packing."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.errors import OptionError, ShapeError
from hybridtrack.geometry import se3
from hybridtrack.synthesis.motion import looking
from hybridtrack.synthesis.raycast import cast
from hybridtrack.synthesis.scene import (
    TEXEL_FULL,
    Box,
    SceneBuilder,
    Surface,
    flat_panel,
    pyramid,
    texture_from_picture,
)


def test_pyramid_halves_and_keeps_the_mean() -> None:
    """Every level averages 2 x 2 texels of the one before, down to one texel that is the mean."""
    picture = np.random.default_rng(0).random((32, 64))
    levels = pyramid(picture)
    assert [level.shape for level in levels[:3]] == [(32, 64), (16, 32), (8, 16)]
    assert levels[-1].shape == (1, 1)
    assert levels[1][3, 5] == pytest.approx(picture[6:8, 10:12].mean(), abs=1e-6)
    assert levels[-1][0, 0] == pytest.approx(picture.mean(), abs=1e-6)


def test_pyramid_of_odd_size_keeps_the_scale() -> None:
    """An odd side is rounded up, its last texel counting twice, so that a level's texel is exactly two of the last."""
    picture = np.arange(15.0).reshape(3, 5)
    assert pyramid(picture)[1].shape == (2, 3)
    assert pyramid(picture)[1][1, 2] == pytest.approx(14.0)


@pytest.mark.parametrize("turn_rad", [0.0, 0.7])
def test_box_faces_are_seen_from_outside_only(turn_rad: float) -> None:
    """A ray from any side meets the near face of a box, and a ray from inside meets nothing."""
    builder = SceneBuilder()
    texture = builder.texture(np.full((4, 4), 0.5))
    builder.add(*Box((0.0, 0.0, 0.0), (1.0, 0.8, 0.6), turn_rad).surfaces(texture, texture))
    scene = builder.build()
    turn = np.array([[np.cos(turn_rad), -np.sin(turn_rad)], [np.sin(turn_rad), np.cos(turn_rad)]])
    for face, outward in ((1, (0.0, -1.0)), (2, (0.0, 1.0)), (3, (-1.0, 0.0)), (4, (1.0, 0.0))):
        direction = np.array([*(turn @ outward), 0.0])
        eye = 3.0 * direction + [0, 0, 0.3]
        hits = cast(scene, se3.compose(looking(-direction), eye), np.array([[0.0, 0.0, 1.0]]))
        half = 0.4 if outward[0] == 0.0 else 0.5
        assert hits.surface[0] == face
        assert hits.distance[0] == pytest.approx(3.0 - half)
    inside = cast(scene, se3.compose(np.eye(3), [0, 0, 0.3]), np.array([[1.0, 0, 0], [0, 1.0, 0], [0, 0, 1.0]]))
    assert np.all(inside.surface == -1)


def test_box_textures_stand_upright() -> None:
    """On a side face, seen from outside, texture columns run to the right and rows down."""
    builder = SceneBuilder()
    texture = builder.texture(np.full((4, 4), 0.5))
    builder.add(*Box((0.0, 0.0, 0.0), (1.0, 1.0, 1.0)).surfaces(texture, texture))
    scene = builder.build()
    eye = se3.compose(looking(np.array([0.0, 1.0, 0.0])), [0.0, -3.0, 0.5])
    right_and_low = cast(scene, eye, np.array([[0.1, 0.12, 1.0]]) / np.linalg.norm([0.1, 0.12, 1.0]))
    assert right_and_low.surface[0] == 1
    assert np.all(right_and_low.place[0] > 0.6)


def test_picture_file_becomes_linear_light(tmp_path: Path) -> None:
    """A picture file's gamma is taken off; a file that is no picture is refused."""
    cv2.imwrite(str(tmp_path / "grey.png"), np.array([[0, 128, 255]], np.uint8))
    light = texture_from_picture(str(tmp_path / "grey.png"), brightest=0.8)
    np.testing.assert_allclose(light, [[0.0, 0.8 * (128 / 255) ** 2.2, 0.8]], rtol=1e-6)
    (tmp_path / "text.png").write_text("no picture")
    with pytest.raises(OptionError, match="can't be read as one"):
        texture_from_picture(str(tmp_path / "text.png"))


def test_outside_photograph_as_texture() -> None:
    """A photograph bundled with scikit-image makes a scene whose coarsest texel is its mean light."""
    data = pytest.importorskip("skimage.data")
    light = (data.camera().astype(float) / 255.0) ** 2.2
    scene = flat_panel(light, 1.0, 1.0)
    coarsest = scene.levels[0, scene.levels[0, 0, 3] - 1, 0]
    assert scene.texels[coarsest] / TEXEL_FULL == pytest.approx(light.mean(), abs=1e-4)


def test_builder_refuses_what_is_no_scene() -> None:
    """Textures outside 0..1 or of another shape, surfaces without an area and empty scenes are refused."""
    builder = SceneBuilder()
    with pytest.raises(ShapeError, match="at least one surface"):
        builder.build()
    with pytest.raises(ShapeError, match=r"shape \(H, W\)"):
        builder.texture(np.zeros((2, 2, 3)))
    with pytest.raises(ShapeError, match=r"values in 0\.\.1"):
        builder.texture(np.full((2, 2), 1.5))
    builder.add(Surface((0, 0, 0), (1, 0, 0), (2, 0, 0), builder.texture(np.full((2, 2), 0.5))))
    with pytest.raises(ShapeError, match="with an area"):
        builder.build()
