"""Tracks in memory and on disk."""

import json
from pathlib import Path

import h5py
import numpy as np
import pytest

from hybridtrack.errors import FileFormatError, MissingFileError, ShapeError
from hybridtrack.tracking import Tracks, read_tracks, write_tracks


def some_tracks(count: int = 50) -> Tracks:
    random = np.random.default_rng(3)
    return Tracks(
        random.integers(0, 9, count),
        random.integers(0, 10**18, count),
        random.uniform(0, 1280, (count, 2)),
        random.uniform(0, 1, (count, 3)).astype(np.float32),
        *(random.integers(0, 3, count).astype(np.uint8) for _ in range(3)),
    )


def test_round_trip_sorts_by_time_then_id(tmp_path: Path) -> None:
    """What is read is what was written, in order of time, then id, to the last bit."""
    tracks = some_tracks()
    write_tracks(tmp_path / "run.tracks.h5", tracks)
    read = read_tracks(tmp_path / "run.tracks.h5")
    order = np.lexsort((tracks.id, tracks.t_ns))
    for name in ("id", "t_ns", "uv", "cov", "state", "reason", "source"):
        np.testing.assert_array_equal(getattr(read, name), getattr(tracks, name)[order])
    assert read.states == tracks.states


def test_layout_is_the_documented_one(tmp_path: Path) -> None:
    """Other programs find the columns, kinds and attributes that the layout promises."""
    write_tracks(tmp_path / "run.tracks.h5", some_tracks())
    kinds = {"id": "i8", "t": "i8", "u": "f8", "v": "f8", "cov_uu": "f4", "cov_uv": "f4", "cov_vv": "f4"}
    kinds |= {"state": "u1", "reason": "u1", "source": "u1"}
    with h5py.File(tmp_path / "run.tracks.h5") as handle:
        assert {name: data.dtype.str[1:] for name, data in handle["tracks"].items()} == kinds
        assert handle.attrs["format"] == "hybridtrack-tracks"
        assert handle.attrs["version"] == 1
        assert json.loads(handle.attrs["sources"]) == ["frame", "events", "both"]
        assert json.loads(handle.attrs["states"]) == ["alive", "weak", "lost", "out_of_view"]


def test_no_tracks_are_a_file_too(tmp_path: Path) -> None:
    """An empty run is written and read."""
    write_tracks(tmp_path / "run.tracks.h5", Tracks.empty())
    assert len(read_tracks(tmp_path / "run.tracks.h5")) == 0


def test_last_line_of_one_time_and_id_stays() -> None:
    """Where two lines share time and id, the later one given replaces the earlier."""
    one = some_tracks(1)
    two = Tracks(one.id, one.t_ns, one.uv + 1.0, one.cov, one.state, one.reason, one.source)
    ordered = Tracks.joined([one, two]).in_order()
    np.testing.assert_array_equal(ordered.uv, two.uv)


def test_unequal_columns_are_refused() -> None:
    """A column of another length is named."""
    tracks = some_tracks(4)
    with pytest.raises(ShapeError, match=r"Expected `uv` of shape \(4, 2\), got \(3, 2\)"):
        Tracks(tracks.id, tracks.t_ns, tracks.uv[:3], tracks.cov, tracks.state, tracks.reason, tracks.source)


def test_unknown_state_is_refused() -> None:
    """A state that the tracks do not have is refused by name."""
    with pytest.raises(ShapeError, match=r"Expected a state of .* got 'asleep'"):
        some_tracks().with_state("asleep")


def test_unreadable_files_are_refused(tmp_path: Path) -> None:
    """Missing, cut, foreign and inconsistent files each have their sentence."""
    path = tmp_path / "run.tracks.h5"
    with pytest.raises(MissingFileError, match="expected a tracks file"):
        read_tracks(path)
    path.write_bytes(b"not a file of tracks")
    with pytest.raises(FileFormatError, match="truncated or of another kind"):
        read_tracks(path)
    write_tracks(path, some_tracks())
    with h5py.File(path, "a") as handle:
        handle["tracks/state"][0] = 77
    with pytest.raises(FileFormatError, match="/tracks/state must index 4 names, got 77"):
        read_tracks(path)
    with h5py.File(path, "a") as handle:
        del handle["tracks/u"]
    with pytest.raises(FileFormatError, match="/tracks/u is required and missing"):
        read_tracks(path)
    with h5py.File(path, "a") as handle:
        handle.attrs["format"] = "something"
    with pytest.raises(FileFormatError, match="expected attribute format='hybridtrack-tracks', got 'something'"):
        read_tracks(path)


def test_a_failed_write_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """If writing breaks off, the file before it is still whole and nothing else is left."""
    path = tmp_path / "run.tracks.h5"
    write_tracks(path, some_tracks(5))

    def broken(*args: object) -> None:
        raise OSError("disk full")

    monkeypatch.setattr("os.replace", broken)
    with pytest.raises(OSError, match="disk full"):
        write_tracks(path, some_tracks(9))
    assert len(read_tracks(path)) == 5
    assert [entry.name for entry in tmp_path.iterdir()] == ["run.tracks.h5"]
