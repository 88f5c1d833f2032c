"""Pictures and clips as files: greys linear in log brightness, atomic, with times without a picture marked."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.tracking.picture import Picture
from hybridtrack.tracking.picture_files import Greys, flashes_a_second, write_clip, write_png

Array = np.ndarray
SHAPE = (60, 80)


def sloping(t_ns: int = 0, lift: float = 0.0) -> Picture:
    """Log brightness from -3 to 0, left to right; one pixel saturated."""
    log_light = np.tile(np.linspace(-3.0, 0.0, SHAPE[1], dtype=np.float32), (SHAPE[0], 1)) + np.float32(lift)
    saturated = np.zeros(SHAPE, bool)
    saturated[5, 7] = True
    return Picture(t_ns, log_light, saturated, (0,), "forward")


def absent(t_ns: int) -> Picture:
    """An instant without a picture."""
    return Picture(t_ns, np.full(SHAPE, np.nan, np.float32), np.zeros(SHAPE, bool), (), "none", "events lost")


def frames_of(path: Path) -> list[Array]:
    """All pictures of a film, BGR."""
    film, found = cv2.VideoCapture(str(path)), []
    while True:
        there, picture = film.read()
        if not there:
            return found
        found.append(picture)


@pytest.mark.parametrize(("bits", "step"), [(8, 255), (16, 65535)])
def test_grey_gives_log_brightness_back(tmp_path: Path, bits: int, step: int) -> None:
    """Between black and white to half a step of grey, at the frame's size; saturated pixels are white."""
    picture, greys = sloping(), Greys(-3.0, 0.0)
    write_png(tmp_path / "p.png", picture, greys, bits)
    read = cv2.imread(str(tmp_path / "p.png"), cv2.IMREAD_UNCHANGED)
    assert read.shape == SHAPE
    assert read[5, 7] == step
    back = greys.black + read / step * (greys.white - greys.black)
    back[5, 7] = picture.log_light[5, 7]
    np.testing.assert_allclose(back, picture.log_light, atol=0.5001 * 3.0 / step)


def test_greys_show_nearly_all_and_do_not_stretch_noise() -> None:
    """Levels near the ends of a picture; a flat one keeps half a natural-log unit about its level."""
    greys = Greys.of(sloping().log_light)
    assert greys.black == pytest.approx(-3.0, abs=0.05)
    assert greys.white == pytest.approx(0.0, abs=0.05)
    flat = Greys.of(np.full(SHAPE, -1.0) + 0.01 * np.random.default_rng(1).standard_normal(SHAPE))
    assert (flat.black, flat.white) == (pytest.approx(-1.25, abs=0.02), pytest.approx(-0.75, abs=0.02))
    assert np.isfinite(Greys.of(absent(0).log_light).black)


def test_a_clip_marks_times_without_a_picture(tmp_path: Path) -> None:
    """Three pictures at 25 a second; the second repeats the first in a coloured border; greys are the first one's."""
    seen: list[Picture] = []
    path = tmp_path / "clip.mp4"
    clip = write_clip(path, iter([sloping(), absent(1), sloping(2, lift=-0.5)]), 25.0, seen.append)
    assert [picture.t_ns for picture in seen] == [0, 1, 2]
    assert clip.greys == Greys.of(sloping().log_light)
    shown = [picture.astype(float) for picture in frames_of(path)]
    assert len(shown) == 3
    height, width = shown[0].shape[:2]
    assert (height, width) == (480, 640)
    inside = (slice(height // 4, 3 * height // 4), slice(width // 4, 3 * width // 4))
    assert np.abs(shown[1][inside] - shown[0][inside]).mean() < 4
    assert (shown[1][3, :, 2] - shown[1][3, :, 0]).mean() > 60
    assert np.abs(shown[0][3, :, 2] - shown[0][3, :, 0]).mean() < 10
    assert (shown[0][inside] - shown[2][inside]).mean() == pytest.approx(255 * 0.5 / 3.0, abs=8)
    assert cv2.VideoCapture(str(path)).get(cv2.CAP_PROP_FPS) == pytest.approx(25.0)
    assert [file.name for file in tmp_path.iterdir()] == ["clip.mp4"]


def test_a_refusal_leaves_the_old_clip(tmp_path: Path) -> None:
    """No picture at all, or an error on the way: what was there stays, nothing half-written is left."""
    path = tmp_path / "clip.mp4"
    path.write_bytes(b"old")
    with pytest.raises(OptionError, match="at least one picture is required, got none"):
        write_clip(path, iter([]), 25.0)

    def failing():  # type: ignore[no-untyped-def]
        yield sloping()
        raise OptionError("later")

    with pytest.raises(OptionError, match="later"):
        write_clip(path, failing(), 25.0)
    assert path.read_bytes() == b"old"
    assert [file.name for file in tmp_path.iterdir()] == ["clip.mp4"]


def test_flashes_are_counted_by_the_second() -> None:
    """Pairs of opposing changes by a tenth, in the worst part of the picture and the worst second."""
    t = np.arange(120) / 30.0
    still = np.full(len(t), 0.5)
    for hz, expected in ((5.0, 5), (1.0, 1)):
        blinking = 0.4 + 0.2 * np.sign(np.sin(2 * np.pi * hz * (t + 1e-3)))
        assert abs(flashes_a_second(np.stack([still, blinking], axis=1), 30.0) - expected) <= (hz > 1)
    faint = 0.4 + 0.045 * np.sign(np.sin(2 * np.pi * 5.0 * (t + 1e-3)))
    assert flashes_a_second(faint[:, None], 30.0) == 0
    assert flashes_a_second(np.linspace(0.0, 1.0, 120)[:, None], 30.0) == 0
