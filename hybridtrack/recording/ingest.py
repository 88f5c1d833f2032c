"""Turn event tables, pictures and sensor tables of other origin into one recording."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hybridtrack.errors import FileFormatError, MissingFileError, OptionError
from hybridtrack.module import HybridModule
from hybridtrack.recording.arrays import Array
from hybridtrack.recording.event_tables import (
    TIME_UNITS_NS,
    EventTableOptions,
    event_table_blocks,
    in_stamp_order,
)
from hybridtrack.recording.frame_sources import (
    FrameStamps,
    frame_pictures,
    read_frame_stamps,
    video_frame_rate,
)
from hybridtrack.recording.writer import RecordingWriter

Progress = Callable[[str, float], None]


@dataclass(frozen=True)
class IngestSources:
    """Which files make up the recording; None where there is none."""

    events: Path | None = None
    frames: Path | None = None
    frame_stamps: Path | None = None
    imu: Path | None = None
    triggers: Path | None = None


@dataclass(frozen=True)
class IngestOptions:
    """How to read them. Times of frames, IMU and triggers share `time_unit`; `exposure_ns` where no table has it."""

    event_table: EventTableOptions = EventTableOptions()
    stamp: str = "start"
    exposure_ns: int | None = None
    grey: bool = False
    reorder_ns: int = 10_000_000


@dataclass(frozen=True)
class IngestCounts:
    """What was written."""

    events: int
    frames: int
    imu: int
    triggers: int


def _sensor_table(path: Path, columns: tuple[str, ...]) -> dict[str, Array]:
    if not path.is_file():
        raise MissingFileError(f"{path}: expected a CSV table, found no such file")
    table = np.atleast_1d(np.genfromtxt(path, delimiter=",", names=True, dtype=None, encoding="utf-8"))
    names = table.dtype.names or ()
    missing = [name for name in columns if name not in names]
    if missing:
        raise FileFormatError(
            f"{path}: column '{missing[0]}' is required, and the header has {', '.join(names) or 'none'}"
        )
    result = {name: table[name] for name in columns}
    if any(values.dtype.kind not in "iufb" or not np.all(np.isfinite(values)) for values in result.values()):
        raise FileFormatError(f"{path}: finite numbers are required in {', '.join(columns)}")
    return result


def _sensor_stamps(values: Array, unit_ns: int, origin_ns: int, path: Path) -> Array:
    stamps = values * unit_ns if values.dtype.kind in "iu" else np.rint(values * float(unit_ns))
    stamps = stamps.astype(np.int64) + origin_ns
    if np.any(np.diff(stamps) < 0):
        raise FileFormatError(
            f"{path}: stamps must not run backwards, and do at row {int(np.argmax(np.diff(stamps) < 0)) + 2}"
        )
    return stamps


def _write_events(writer: RecordingWriter, path: Path, options: IngestOptions, progress: Progress) -> int:
    count = 0
    size = max(1, path.stat().st_size) if path.is_file() else 1
    for block in in_stamp_order(event_table_blocks(path, options.event_table), options.reorder_ns):
        writer.append_events(block.t, block.x, block.y, block.on)
        count += len(block)
        # Around 20 bytes a row of text; only the bar depends on it.
        progress("events", min(0.99, count * 20 / size))
    if not count:
        raise FileFormatError(f"{path}: events are required, and the table holds none")
    return count


def _video_stamps(path: Path, exposure_ns: int | None) -> Iterator[tuple[int, int]]:
    period_ns = 1e9 / video_frame_rate(path)
    exposure = int(period_ns / 2) if exposure_ns is None else exposure_ns
    index = 0
    while True:
        yield round(index * period_ns), exposure
        index += 1


def _stamp_pairs(
    sources: IngestSources, options: IngestOptions, unit_ns: int
) -> tuple[Iterator[tuple[int, int]], int | None]:
    if sources.frame_stamps is not None:
        stamps: FrameStamps = read_frame_stamps(sources.frame_stamps, unit_ns, options.stamp, options.exposure_ns)
        return zip(stamps.t_start_ns.tolist(), stamps.exposure_ns.tolist(), strict=True), len(stamps.t_start_ns)
    assert sources.frames is not None
    if sources.frames.is_dir():
        raise OptionError(f"{sources.frames}: a folder of pictures needs a table of stamps, and none was given")
    return _video_stamps(sources.frames, options.exposure_ns), None


def _write_frames(writer: RecordingWriter, sources: IngestSources, options: IngestOptions, progress: Progress) -> int:
    assert sources.frames is not None
    pairs, expected = _stamp_pairs(sources, options, TIME_UNITS_NS[options.event_table.time_unit])
    count, shape = 0, None
    for image in frame_pictures(sources.frames, options.grey):
        pair = next(pairs, None)
        if pair is None:
            raise FileFormatError(
                f"{sources.frame_stamps}: a stamp for every picture is required, and there are more pictures"
            )
        if shape is not None and image.shape != shape:
            raise FileFormatError(
                f"{sources.frames}: pictures of one size are required, got {image.shape} after {shape}"
            )
        shape = image.shape
        writer.append_frames(image[None], np.array([pair[0]]), np.array([pair[1]]), np.array([count], np.uint64))
        count += 1
        progress("frames", count / expected if expected else 0.5)
    if expected is not None and count != expected:
        raise FileFormatError(
            f"{sources.frame_stamps}: one stamp a picture is required, got {expected} for {count} pictures"
        )
    return count


def ingest(
    sources: IngestSources, out: Path, module: HybridModule | None, options: IngestOptions, progress: Progress
) -> IngestCounts:
    """Write a recording from the sources. Nothing is left at `out` when any of them is refused."""
    if sources.events is None and sources.frames is None:
        raise OptionError("ingest: a table of events or a source of frames is required, got neither")
    unit_ns, origin = TIME_UNITS_NS[options.event_table.time_unit], options.event_table.time_origin_ns
    events = frames = imu_count = trigger_count = 0
    with RecordingWriter(out, module) as writer:
        if sources.events is not None:
            events = _write_events(writer, sources.events, options, progress)
        if sources.frames is not None:
            frames = _write_frames(writer, sources, options, progress)
        if sources.imu is not None:
            table = _sensor_table(sources.imu, ("t", "gx", "gy", "gz", "ax", "ay", "az"))
            stamps = _sensor_stamps(table["t"], unit_ns, origin, sources.imu)
            gyro = np.stack([table[n] for n in ("gx", "gy", "gz")], axis=1).astype(float)
            accel = np.stack([table[n] for n in ("ax", "ay", "az")], axis=1).astype(float)
            writer.set_group("imu", t=stamps, gyro=gyro, accel=accel)
            imu_count = len(stamps)
        if sources.triggers is not None:
            table = _sensor_table(sources.triggers, ("t", "channel", "edge"))
            stamps = _sensor_stamps(table["t"], unit_ns, origin, sources.triggers)
            writer.set_group(
                "triggers", t=stamps, channel=table["channel"].astype(np.uint8), edge=table["edge"].astype(np.int8)
            )
            trigger_count = len(stamps)
    return IngestCounts(events, frames, imu_count, trigger_count)
