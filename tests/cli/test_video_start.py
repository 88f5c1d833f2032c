"""Where a user with no module yet starts: a plain video, simulated events, features followed through it."""

from pathlib import Path

import cv2
import numpy as np

from hybridtrack.tracking import read_tracks
from tests.cli.test_commands import assert_refused, run, still_scene


def moving_texture(path: Path, frames: int = 12, step_px: int = 3) -> None:
    """A film of blobs that move to the right."""
    rng = np.random.default_rng(5)
    wide = cv2.GaussianBlur(rng.normal(size=(160, 400)), (0, 0), 3)
    wide = (128 + 100 * wide / np.abs(wide).max()).astype(np.uint8)
    film = cv2.VideoWriter(str(path), cv2.VideoWriter.fourcc(*"mp4v"), 30.0, (240, 160))
    for index in range(frames):
        start = 120 - step_px * index
        film.write(cv2.cvtColor(wide[:, start : start + 240], cv2.COLOR_GRAY2BGR))
    film.release()


def test_from_a_video_to_tracks_and_an_overlay(tmp_path: Path) -> None:
    """The recording carries the simulated module, so that none need be named; features move as the film does."""
    clip, recording, out = tmp_path / "clip.mp4", tmp_path / "clip.h5", tmp_path / "tracks"
    moving_texture(clip)
    assert run("ingest", "--events-from-video", clip, recording).returncode == 0
    result = run("track", recording, "--out", out, "--overlay")
    assert result.returncode == 0, result.stderr
    assert cv2.VideoCapture(str(out / "overlay.mp4")).read()[0]
    tracks = read_tracks(out / "run.tracks.h5")
    speeds = []
    for identity in np.unique(tracks.id):
        mine = tracks.of(int(identity))
        alive = mine.with_state("alive")
        if np.count_nonzero(alive) > 100:
            t, u = mine.t_ns[alive] * 1e-9, mine.uv[alive, 0]
            speeds.append(np.polyfit(t, u, 1)[0])
    assert len(speeds) > 5
    assert abs(np.median(speeds) - 90.0) < 3.0


def test_a_recording_without_a_module_asks_for_one(tmp_path: Path) -> None:
    """One sentence, and the option that helps."""
    path = tmp_path / "still.h5"
    still_scene(path)
    for command in ("track", "odometry"):
        result = run(command, path, "--out", tmp_path / "out")
        assert_refused(result, "name one with --module")
    assert not (tmp_path / "out").exists()
