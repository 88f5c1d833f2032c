"""Whole recordings through the tracker, and tracks drawn over their frames."""

from pathlib import Path

import cv2
import numpy as np
import pytest
from rides import Ride

from hybridtrack.errors import DegenerateDataError, ModuleMismatchError, OptionError
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording, RecordingWriter
from hybridtrack.tracking import TrackerOptions, offline, track_recording
from hybridtrack.tracking.overlay import overlay_picture, write_overlay


@pytest.fixture(scope="session")
def recorded(slow_ride: Ride, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The slow ride as a recording."""
    path = tmp_path_factory.mktemp("ride") / "slow.h5"
    with RecordingWriter(path, slow_ride.scene.module, {}) as writer:
        for events in slow_ride.events:
            writer.append_events(events.t, events.x, events.y, events.on)
        starts, pictures = zip(*slow_ride.frames, strict=True)
        count = len(starts)
        writer.append_frames(np.stack(pictures), np.array(starts), np.full(count, slow_ride.exposure_ns, np.int64))
    return path


@pytest.mark.parametrize("mode", ["hybrid", "frames", "events"])
def test_offline_is_the_live_tracker(slow_ride: Ride, recorded: Path, mode: str) -> None:
    """A recording gives the lines that pushing the same data gives, in every mode, and reports progress."""
    told: list[float] = []
    with Recording.open(recorded) as recording:
        options = TrackerOptions(mode=mode)  # type: ignore[arg-type]
        tracks = track_recording(
            recording, slow_ride.scene.module, options, slow_ride.points, lambda stage, part: told.append(part)
        )
    live = slow_ride.run(mode)
    # Live, events of the time between two frames' ends come with the later frame; only what follows the last differs.
    tracks = tracks[tracks.t_ns <= live.t_ns.max()]
    np.testing.assert_array_equal(tracks.id, live.id)
    np.testing.assert_array_equal(tracks.uv, live.uv)
    assert told[-1] == 1.0


def test_small_blocks_change_nothing(slow_ride: Ride, recorded: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Reading 777 events at a time gives the same tracks as reading all at once."""
    module = slow_ride.scene.module
    with Recording.open(recorded) as recording:
        whole = track_recording(recording, module, points=slow_ride.points)
        monkeypatch.setattr(offline, "BLOCK_EVENTS", 777)
        pieces = track_recording(recording, module, points=slow_ride.points)
    np.testing.assert_array_equal(whole.uv, pieces.uv)


def test_recordings_that_do_not_fit_are_refused(slow_ride: Ride, recorded: Path, tmp_path: Path) -> None:
    """Frames of another size, no frames and no events are named with the file."""
    module: HybridModule = slow_ride.scene.module
    other = module.model_copy(update={"frame_mode": module.frame_mode.model_copy(update={"width": 200})})
    with (
        Recording.open(recorded) as recording,
        pytest.raises(ModuleMismatchError, match=r"must be 200x160 .* got 240x160"),
    ):
        track_recording(recording, other)
    events = slow_ride.events[0]
    with RecordingWriter(tmp_path / "blind.h5", module) as writer:
        writer.append_events(events.t, events.x, events.y, events.on)
    with (
        Recording.open(tmp_path / "blind.h5") as recording,
        pytest.raises(DegenerateDataError, match="frames are required"),
    ):
        track_recording(recording, module)
    with RecordingWriter(tmp_path / "still.h5", module) as writer:
        start, picture = slow_ride.frames[0]
        writer.append_frames(picture[None], np.array([start]), np.array([slow_ride.exposure_ns]))
    with Recording.open(tmp_path / "still.h5") as recording:
        with pytest.raises(DegenerateDataError, match="events are required"):
            track_recording(recording, module)
        assert len(track_recording(recording, module, TrackerOptions(mode="frames"))) > 10


def test_overlays_show_tracks(slow_ride: Ride, recorded: Path, tmp_path: Path) -> None:
    """The picture has marks in colour where features are; film and picture files open; other endings are refused."""
    module = slow_ride.scene.module
    with Recording.open(recorded) as recording:
        tracks = track_recording(recording, module, points=slow_ride.points)
        image = overlay_picture(recording, module, tracks, 5)
        grey = overlay_picture(recording, module, tracks[:0], 5)
        coloured = np.any(image != grey, axis=2)
        scale = image.shape[0] // module.frame_mode.height
        t_ns = slow_ride.frames[5][0] + 6_000_000
        near = tracks[np.abs(tracks.t_ns - t_ns) < 600_000]
        at = np.rint(module.frame_mode.frame_from_colour(near.uv) * scale).astype(int)
        hits = [coloured[max(v - 8, 0) : v + 9, max(u - 8, 0) : u + 9].any() for u, v in at]
        assert np.mean(hits) > 0.95
        assert 0 < coloured.mean() < 0.2
        write_overlay(recording, module, tracks, tmp_path / "tracks.png")
        assert cv2.imread(str(tmp_path / "tracks.png")).shape == image.shape
        write_overlay(recording, module, tracks, tmp_path / "tracks.mp4")
        film = cv2.VideoCapture(str(tmp_path / "tracks.mp4"))
        assert int(film.get(cv2.CAP_PROP_FRAME_COUNT)) == len(slow_ride.frames)
        film.release()
        with pytest.raises(OptionError, match=r"must be named \*\.mp4 or \*\.png, got 'tracks\.gif'"):
            write_overlay(recording, module, tracks, tmp_path / "tracks.gif")
    assert sorted(entry.name for entry in tmp_path.iterdir()) == ["tracks.mp4", "tracks.png"]
