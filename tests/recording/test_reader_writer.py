"""The recording store: blocks in, time ranges out, whole files or none, refusals in one sentence."""

import os
import signal
import subprocess
import sys
import textwrap
from pathlib import Path

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hybridtrack.errors import DegenerateDataError, FileFormatError, MissingFileError, ShapeError
from hybridtrack.module import load_module
from hybridtrack.recording import Events, Recording, RecordingWriter
from hybridtrack.recording.truth import read_truth

WREN = load_module(Path(__file__).parents[2] / "calib_targets" / "wren.module.json")


def some_events(count: int, seed: int = 0) -> Events:
    rng = np.random.default_rng(seed)
    t = np.sort(rng.integers(0, 10_000, count)).astype(np.int64)
    x, y = rng.integers(0, 320, count).astype(np.uint16), rng.integers(0, 200, count).astype(np.uint16)
    return Events(t, x, y, rng.integers(0, 2, count).astype(np.uint8))


def write(path: Path, events: Events, frames: int = 3) -> None:
    with RecordingWriter(path, WREN, settings={"gain_db": 6.0}) as writer:
        for start in range(0, len(events), 700):
            part = events[start : start + 700]
            writer.append_events(part.t, part.x, part.y, part.on)
        images = np.arange(frames * 12, dtype=np.uint8).reshape(frames, 3, 4)
        writer.append_frames(images, np.arange(frames) * 1000, np.full(frames, 500), np.arange(frames))


def test_what_is_written_is_read(tmp_path: Path) -> None:
    """Events, frames, attributes and the module come back as they went in."""
    path, events = tmp_path / "a.h5", some_events(5000)
    write(path, events)
    with Recording.open(path) as recording:
        again = recording.events()
        for name in ("t", "x", "y", "on"):
            np.testing.assert_array_equal(getattr(again, name), getattr(events, name))
            assert getattr(again, name).dtype == getattr(events, name).dtype
        assert recording.module == WREN
        assert recording.settings == {"gain_db": 6.0}
        assert recording.frames.shape == (3, 4)
        np.testing.assert_array_equal(recording.frame_image(1).ravel(), np.arange(12, 24))
        np.testing.assert_array_equal(recording.frames.t_start_ns, [0, 1000, 2000])
        assert recording.imu is None
        assert recording.events_lost.shape == (0, 2)


@settings(deadline=None, max_examples=25)
@given(st.integers(-100, 11_000), st.integers(-100, 11_000))
def test_a_time_range_is_half_open(tmp_path_factory: pytest.TempPathFactory, t0: int, t1: int) -> None:
    """Events with t0 <= t < t1, whatever lies at the ends."""
    path = tmp_path_factory.getbasetemp() / "range.h5"
    events = some_events(3000, seed=4)
    if not path.exists():
        write(path, events)
    with Recording.open(path) as recording:
        expected = events.t[(events.t >= t0) & (events.t < t1)]
        np.testing.assert_array_equal(recording.events(t0, t1).t, expected)
        blocks = list(recording.event_blocks(t0, t1, size=500))
        np.testing.assert_array_equal(Events.joined(blocks).t, expected)


def test_the_layout_is_the_one_that_others_read(tmp_path: Path) -> None:
    """Groups, names and types stand in the file as the design fixes them."""
    path = tmp_path / "layout.h5"
    write(path, some_events(10))
    with h5py.File(path) as handle:
        assert handle.attrs["format"] == "hybridtrack-recording"
        assert handle.attrs["version"] == 1
        kinds = {name: handle[name].dtype for name in ("events/t", "events/x", "events/y", "events/on")}
        assert kinds == {"events/t": np.int64, "events/x": np.uint16, "events/y": np.uint16, "events/on": np.uint8}
        assert handle["frames/t_start"].dtype == np.int64
        assert handle["frames/exposure"].dtype == np.int64
        assert handle["frames/number"].dtype == np.uint64


def test_truth_is_read_apart(tmp_path: Path) -> None:
    """Poses and the true module come back; a recording without them says so."""
    path, bare = tmp_path / "truth.h5", tmp_path / "bare.h5"
    with RecordingWriter(path) as writer:
        writer.set_truth(np.array([5]), np.array([[1.0, 2.0, 3.0, 0.0, 0.0, 0.0, 1.0]]), WREN, blink_hz=np.array(61.0))
    truth = read_truth(path)
    np.testing.assert_allclose(truth.world_from_camera[0, :3, 3], [1, 2, 3])
    assert truth.module == WREN
    assert truth.extras["blink_hz"] == 61.0
    write(bare, some_events(10))
    with pytest.raises(FileFormatError, match="/truth/pose is missing"):
        read_truth(bare)
    with Recording.open(path) as recording:
        assert not any("truth" in name for name in dir(recording))


def test_an_exception_while_writing_leaves_the_old_file(tmp_path: Path) -> None:
    """The name never points at half a recording, and nothing is left beside it."""
    path = tmp_path / "kept.h5"
    write(path, some_events(20))
    before = path.read_bytes()
    with pytest.raises(RuntimeError, match="stop"), RecordingWriter(path) as writer:
        writer.append_events(*([np.array([1])] * 4))
        raise RuntimeError("stop")
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]


def test_a_killed_writer_leaves_the_old_file(tmp_path: Path) -> None:
    """kill -9 in the middle of a write leaves the file that was there."""
    path = tmp_path / "killed.h5"
    write(path, some_events(20))
    before = path.read_bytes()
    script = textwrap.dedent(f"""
        import numpy as np, time
        from hybridtrack.recording import RecordingWriter
        writer = RecordingWriter({str(path)!r})
        print("open", flush=True)
        for n in range(10**6):
            writer.append_events(np.full(1000, n), *[np.zeros(1000, int)] * 3)
    """)
    with subprocess.Popen([sys.executable, "-c", script], stdout=subprocess.PIPE, text=True) as child:
        assert child.stdout is not None
        assert child.stdout.readline() == "open\n"
        os.kill(child.pid, signal.SIGKILL)
    assert path.read_bytes() == before


def test_stamps_that_run_backwards_are_refused(tmp_path: Path) -> None:
    """On writing, within a block and between blocks; on reading a file that others wrote."""
    with RecordingWriter(tmp_path / "x.h5") as writer:
        one = np.array([1])
        writer.append_events(np.array([5]), one, one, one)
        with pytest.raises(ShapeError, match="step back"):
            writer.append_events(np.array([4]), one, one, one)
    with h5py.File(tmp_path / "y.h5", "w") as handle:
        handle.attrs.update({"format": "hybridtrack-recording", "version": 1})
        for name, values in (("t", [3, 1]), ("x", [0, 0]), ("y", [0, 0]), ("on", [1, 1])):
            handle[f"events/{name}"] = np.array(values)
    with Recording.open(tmp_path / "y.h5") as recording, pytest.raises(FileFormatError, match="must not run backwards"):
        list(recording.event_blocks())


def damaged(path: Path, how: str) -> None:
    if how == "text":
        path.write_text("not a recording")
        return
    write(path, some_events(5000))
    if how == "truncated":
        path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
        return
    with h5py.File(path, "a") as handle:
        if how == "label":
            handle.attrs["format"] = "something-else"
        elif how == "version":
            handle.attrs["version"] = 3
        elif how == "column":
            del handle["events/y"]
        elif how == "length":
            handle["events/x"].resize(10, axis=0)
        elif how == "float":
            del handle["events/t"]
            handle["events/t"] = np.linspace(0, 1, 5000)
        elif how == "stamps":
            handle["frames/t_start"].resize(1, axis=0)


@pytest.mark.parametrize(
    ("how", "message"),
    [
        ("text", "truncated or of another kind"),
        ("truncated", "truncated or of another kind"),
        ("label", "expected attribute format='hybridtrack-recording', got 'something-else'"),
        ("version", "version 1, got"),
        ("column", "/events/y is required and missing"),
        ("length", "must have one length"),
        ("float", "/events/t must be integer, got float64"),
        ("stamps", "must have one length"),
    ],
)
def test_a_damaged_recording_is_refused_in_one_sentence(tmp_path: Path, how: str, message: str) -> None:
    """The sentence names the file and the field, and has no line break."""
    path = tmp_path / "damaged.h5"
    damaged(path, how)
    with pytest.raises(FileFormatError, match=message) as caught:
        Recording.open(path)
    assert "damaged.h5" in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_and_empty_recordings_are_refused(tmp_path: Path) -> None:
    """No such file, and a recording that holds nothing when something is asked of it."""
    with pytest.raises(MissingFileError, match="no such file"):
        Recording.open(tmp_path / "none.h5")
    with RecordingWriter(tmp_path / "empty.h5"):
        pass
    with Recording.open(tmp_path / "empty.h5") as recording:
        with pytest.raises(DegenerateDataError, match="holds none"):
            recording.require_events()
        with pytest.raises(DegenerateDataError, match="at least 2 frames"):
            recording.require_frames(2)
        assert len(recording.events()) == 0
