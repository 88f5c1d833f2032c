"""The frozen baseline."""

from pathlib import Path

import cv2
import numpy as np
import pytest

from hybridtrack.benchmark.baseline import flow_step, track_baseline
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import HybridModule, load_module
from hybridtrack.recording import Recording, RecordingWriter
from hybridtrack.tracking import Points

ROOT = Path(__file__).parents[2]


def module() -> HybridModule:
    nominal = load_module(ROOT / "calib_targets" / "wren.module.json")
    return nominal.model_validate(
        {**nominal.model_dump(), "timing": {"frame_offset_ns": 1000.0, "line_time_ns": 10_000.0}}
    )


def sliding(step_px: float, count: int) -> np.ndarray:
    """Frames (count, 400, 640) of a random texture that slides right by `step_px` a frame."""
    texture = cv2.GaussianBlur(np.random.default_rng(0).uniform(0, 255, (400, 900)), (0, 0), 3.0)
    texture = np.clip((texture - texture.mean()) * 6 + 128, 0, 255).astype(np.float32)
    columns, rows = np.meshgrid(np.arange(640, dtype=np.float32), np.arange(400, dtype=np.float32))
    frames = [cv2.remap(texture, columns + 120 - np.float32(step_px * k), rows, cv2.INTER_CUBIC) for k in range(count)]
    return np.rint(frames).astype(np.uint8)


def record(path: Path, frames: np.ndarray) -> Path:
    starts = 10_000_000 * np.arange(len(frames))
    with RecordingWriter(path, module()) as writer:
        writer.append_frames(frames, starts, np.full(len(frames), 2_000_000, np.int64))
    return path


def test_known_sliding_is_followed_at_mid_exposure(tmp_path: Path) -> None:
    """Positions move by the known step, stamped with the middle of the rows' exposure, from the stamp on."""
    path = record(tmp_path / "slide.h5", sliding(3.3, 5))
    points = Points(np.array([5, 9]), np.array([0, 15_000_000]), np.array([[400.5, 300.5], [640.5, 500.5]]))
    with Recording.open(path) as recording:
        tracks = track_baseline(recording, module(), points)
    early, late = tracks.of(5), tracks.of(9)
    np.testing.assert_allclose(early.uv[:, 0], 400.5 + 2 * 3.3 * np.arange(5), atol=0.15)
    np.testing.assert_allclose(early.uv[:, 1], 300.5, atol=0.15)
    row = (300.5 - 0.5) / 2
    np.testing.assert_allclose(early.t_ns, 10_000_000 * np.arange(5) + 1000 + row * 10_000 + 1_000_000, atol=2000)
    assert len(late) == 3


def test_the_gate_ends_what_can_not_be_followed() -> None:
    """A jump of 200 px passes the gate nowhere; no points give none."""
    one, two = sliding(200.0, 2)
    points = np.array([[u, v] for u in (250.0, 320.0, 400.0) for v in (100.0, 200.0, 300.0)])
    found, good = flow_step(one, two, points)
    right = np.linalg.norm(found - points - [200.0, 0.0], axis=1) < 2
    assert np.mean(good & ~right) < 0.4
    assert not np.any(good & right)
    assert flow_step(one, two, np.empty((0, 2)))[0].shape == (0, 2)


def test_without_frames_it_is_refused(tmp_path: Path) -> None:
    """A recording of events alone has no baseline."""
    with RecordingWriter(tmp_path / "blind.h5", module()) as writer:
        writer.append_events(*(np.zeros(1, kind) for kind in (np.int64, np.uint16, np.uint16, np.uint8)))
    points = Points(np.array([1]), np.array([0]), np.array([[10.0, 10.0]]))
    with (
        Recording.open(tmp_path / "blind.h5") as recording,
        pytest.raises(DegenerateDataError, match="frames are required"),
    ):
        track_baseline(recording, module(), points)
