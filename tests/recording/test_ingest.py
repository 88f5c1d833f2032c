"""Importing events, frames and sensors of other origin."""

from pathlib import Path

import cv2
import h5py
import numpy as np
import pytest

from hybridtrack.errors import FileFormatError, OptionError
from hybridtrack.recording import Events, Recording
from hybridtrack.recording.event_tables import (
    EventTableOptions,
    decimal_text_to_ns,
    event_table_blocks,
    in_stamp_order,
)
from hybridtrack.recording.ingest import IngestOptions, IngestSources, ingest


def quiet(stage: str, fraction: float) -> None:
    """No progress shown."""


def read_all(path: Path, **options: object) -> Events:
    return Events.joined(list(event_table_blocks(path, EventTableOptions(**options))))


def test_csv_npz_and_hdf5_give_the_same_events(tmp_path: Path) -> None:
    """Three layouts of one set of events, with other names and orders, read alike."""
    t, x, y, p = np.array([10, 20, 35]), np.array([1, 2, 3]), np.array([4, 5, 6]), np.array([1, -1, 1])
    (tmp_path / "a.csv").write_text(
        "row,stamp,pol,col\n" + "".join(f"{b},{a},{d},{c}\n" for a, c, b, d in zip(t, x, y, p, strict=True))
    )
    np.savez(tmp_path / "a.npz", stamp=t, col=x, row=y, pol=p)
    with h5py.File(tmp_path / "a.h5", "w") as handle:
        for name, values in (("stamp", t), ("col", x), ("row", y), ("pol", p)):
            handle[f"cam/{name}"] = values
    names = ("stamp", "col", "row", "pol")
    tables = [read_all(tmp_path / f, columns=names, polarity="+-1") for f in ("a.csv", "a.npz")]
    tables.append(read_all(tmp_path / "a.h5", columns=tuple(f"cam/{n}" for n in names), polarity="+-1"))
    for events in tables:
        np.testing.assert_array_equal(events.t, t * 1000)
        np.testing.assert_array_equal(events.x, x)
        np.testing.assert_array_equal(events.y, y)
        np.testing.assert_array_equal(events.on, [1, 0, 1])


def test_decimal_seconds_keep_their_nanoseconds(tmp_path: Path) -> None:
    """A stamp of 1.7e9 s loses 100 ns in a float64; read as text it loses nothing."""
    np.testing.assert_array_equal(
        decimal_text_to_ns(np.array(["1700000000.123456789", "0.5", ".25", "-1.000000001"]), 10**9),
        [1700000000123456789, 500000000, 250000000, -1000000001],
    )
    path = tmp_path / "s.csv"
    path.write_text("1700000000.123456789,1,1,0\n1700000000.123456790,2,2,1\n")
    np.testing.assert_array_equal(read_all(path, time_unit="s").t, [1700000000123456789, 1700000000123456790])


def test_origins_and_codings_are_applied(tmp_path: Path) -> None:
    """Pixels counted from one, a time origin, and a coding where 0 is ON."""
    path = tmp_path / "o.csv"
    path.write_text("# comment\n100 1 1 0\n200 4 2 1\n")
    events = read_all(path, delimiter=" ", pixel_origin=1, time_origin_ns=-50_000, polarity="10")
    np.testing.assert_array_equal(events.t, [50_000, 150_000])
    np.testing.assert_array_equal(events.x, [0, 3])
    np.testing.assert_array_equal(events.on, [1, 0])


@pytest.mark.parametrize(
    ("text", "options", "message"),
    [
        ("t,x,y,p\n1,2,3,7\n", {}, r"polarity must be 1 or 0 .* got 7"),
        ("t,x,y\n1,2,3\n", {}, "column 'p' is required"),
        ("1,2,3,1\n2,oops,3,1\n", {}, "lines 1 to 2: four numbers a row"),
        ("1,0,3,1\n", {"pixel_origin": 1}, "x must be 1 or more"),
        ("", {}, "has no rows"),
    ],
)
def test_bad_tables_are_refused_with_the_rows(tmp_path: Path, text: str, options: dict, message: str) -> None:
    """The sentence names the file, the rows, the requirement and the value."""
    path = tmp_path / "bad.csv"
    path.write_text(text)
    with pytest.raises(FileFormatError, match=message):
        read_all(path, **options)


def test_slight_disorder_is_sorted_and_more_is_refused() -> None:
    """Events up to the stated lateness find their place, stably; a later one is refused."""

    def blocks(stamps: list[list[int]]) -> list[Events]:
        return [Events(np.array(s), *([np.arange(len(s))] * 3)) for s in stamps]

    ordered = Events.joined(list(in_stamp_order(iter(blocks([[10, 30, 20], [25, 60, 55], [52]])), 10)))
    np.testing.assert_array_equal(ordered.t, [10, 20, 25, 30, 52, 55, 60])
    with pytest.raises(FileFormatError, match="out of order"):
        list(in_stamp_order(iter(blocks([[10, 100], [200, 300], [20]])), 10))


def picture_folder(folder: Path, count: int) -> Path:
    folder.mkdir()
    for index in range(count):
        cv2.imwrite(str(folder / f"{index:03d}.png"), np.full((6, 8), 10 * index, np.uint8))
    return folder


@pytest.mark.parametrize(("meaning", "shift"), [("start", 0), ("mid", 500), ("end", 1000)])
def test_what_a_frame_stamp_means_is_honoured(tmp_path: Path, meaning: str, shift: int) -> None:
    """Start of exposure is the stamp, less half the exposure, or less all of it."""
    folder = picture_folder(tmp_path / "pictures", 3)
    (tmp_path / "stamps.csv").write_text("t,exposure\n10,1\n20,1\n30,1\n")
    sources = IngestSources(frames=folder, frame_stamps=tmp_path / "stamps.csv")
    counts = ingest(sources, tmp_path / "r.h5", None, IngestOptions(stamp=meaning), quiet)
    assert counts.frames == 3
    with Recording.open(tmp_path / "r.h5") as recording:
        np.testing.assert_array_equal(recording.frames.t_start_ns, np.array([10, 20, 30]) * 1000 - shift)
        assert recording.frame_image(2)[0, 0] == 20


def test_a_stamp_too_few_leaves_no_file(tmp_path: Path) -> None:
    """Pictures and stamps must match one to one, and a refusal writes nothing."""
    folder = picture_folder(tmp_path / "pictures", 3)
    (tmp_path / "stamps.csv").write_text("t,exposure\n10,1\n20,1\n")
    sources = IngestSources(frames=folder, frame_stamps=tmp_path / "stamps.csv")
    with pytest.raises(FileFormatError, match="a stamp for every picture"):
        ingest(sources, tmp_path / "r.h5", None, IngestOptions(), quiet)
    assert not (tmp_path / "r.h5").exists()


def test_imu_and_triggers_come_along(tmp_path: Path) -> None:
    """Columns are found by name and stamps converted like the rest."""
    (tmp_path / "e.csv").write_text("1,0,0,1\n")
    (tmp_path / "imu.csv").write_text("t,gx,gy,gz,ax,ay,az\n1,0.1,0.2,0.3,0,0,-9.8\n2,0.1,0.2,0.3,0,0,-9.8\n")
    (tmp_path / "edges.csv").write_text("t,channel,edge\n1,0,1\n2,0,-1\n")
    sources = IngestSources(events=tmp_path / "e.csv", imu=tmp_path / "imu.csv", triggers=tmp_path / "edges.csv")
    ingest(sources, tmp_path / "r.h5", None, IngestOptions(), quiet)
    with Recording.open(tmp_path / "r.h5") as recording:
        assert recording.imu is not None
        np.testing.assert_array_equal(recording.imu.t, [1000, 2000])
        np.testing.assert_allclose(recording.imu.gyro[0], [0.1, 0.2, 0.3])
        assert recording.triggers is not None
        np.testing.assert_array_equal(recording.triggers.edge, [1, -1])


def test_nothing_to_ingest_is_refused(tmp_path: Path) -> None:
    """Neither events nor frames."""
    with pytest.raises(OptionError, match="got neither"):
        ingest(IngestSources(), tmp_path / "r.h5", None, IngestOptions(), quiet)
