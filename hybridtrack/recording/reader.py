"""Read a recording by time range, never all of it at once. Layout `hybridtrack-recording`, version 1.

`/truth` is not reachable from here: what estimates reads through this class.
"""

import hashlib
import json
from collections.abc import Iterator
from functools import lru_cache
from pathlib import Path
from types import TracebackType
from typing import Any

import h5py
import hdf5plugin  # noqa: F401  registers the compression filters with h5py
import numpy as np

from hybridtrack.errors import DegenerateDataError, FileFormatError, MissingFileError
from hybridtrack.module import HybridModule, parse_module
from hybridtrack.recording.arrays import Array, Events, FrameTable, Imu, Series, Triggers

LAYOUT = "hybridtrack-recording"
EVENT_COLUMNS = {"t": "i", "x": "u", "y": "u", "on": "u"}


def open_checked(path: Path | str, growing: bool = False) -> h5py.File:
    """Open an HDF5 file and check `format` and `version`; `growing` lets another process append to it meanwhile.

    Raises MissingFileError or FileFormatError.
    """
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a recording (HDF5), found no such file")
    try:
        handle = h5py.File(file, "r", swmr=growing)
    except OSError as error:
        reason = str(error).split("(")[-1].rstrip(")")
        raise FileFormatError(
            f"{file}: expected an HDF5 recording, but it is truncated or of another kind ({reason})"
        ) from None
    try:
        layout, version = handle.attrs.get("format"), handle.attrs.get("version")
        if isinstance(layout, bytes):
            layout = layout.decode("utf-8", "replace")
        if layout != LAYOUT:
            raise FileFormatError(f"{file}: expected attribute format='{LAYOUT}', got {layout!r}")
        if version is None or int(version) != 1:
            raise FileFormatError(f"{file}: expected {LAYOUT} version 1, got {version!r}")
    except BaseException:
        handle.close()
        raise
    return handle


class Recording:
    """A recording, open for reading. Use as a context manager, or call `close`."""

    def __init__(self, handle: h5py.File, path: Path, growing: bool = False) -> None:
        self._handle = handle
        self.path = path
        self.growing = growing
        self._element = lru_cache(maxsize=4096)(self._read_stamp)
        self.event_count = self._check_columns("events", EVENT_COLUMNS)
        self.frames = self._frame_table()

    @classmethod
    def open(cls, path: Path | str, growing: bool = False) -> "Recording":
        """Open and check a recording. Raises MissingFileError or FileFormatError with the field at fault.

        `growing` opens what another process still appends to (HDF5's single writer, multiple readers), as long as it
        was when opened: columns that the writer has not brought to one length yet are cut to the shortest.
        """
        handle = open_checked(path, growing)
        try:
            return cls(handle, Path(path), growing)
        except BaseException:
            handle.close()
            raise

    def close(self) -> None:
        """Close the file."""
        self._handle.close()

    def __enter__(self) -> "Recording":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _refuse(self, what: str) -> FileFormatError:
        return FileFormatError(f"{self.path}: {what}")

    def _check_columns(self, group: str, columns: dict[str, str]) -> int:
        """Check that `group`, if present, has these columns, of these kinds and one length; return that length."""
        if group not in self._handle:
            return 0
        lengths = {}
        for name, kind in columns.items():
            data = self._handle.get(f"{group}/{name}")
            if not isinstance(data, h5py.Dataset):
                raise self._refuse(f"/{group}/{name} is required and missing")
            # Booleans and either sign of integer hold the same values; a float stamp would lose nanoseconds.
            allowed = "f" if kind == "f" else "iub"
            if data.dtype.kind not in allowed and not (kind == "f" and data.dtype.kind in "iu"):
                raise self._refuse(f"/{group}/{name} must be {'float' if kind == 'f' else 'integer'}, got {data.dtype}")
            lengths[name] = len(data)
        if len(set(lengths.values())) > 1 and not self.growing:
            raise self._refuse(f"columns of /{group} must have one length, got {lengths}")
        return min(lengths.values())

    def _frame_table(self) -> FrameTable:
        if "frames" not in self._handle:
            nothing = np.empty(0, np.int64)
            return FrameTable(nothing, nothing, None, None, (0, 0), np.dtype(np.uint8))
        columns = {"t_start": "i", "exposure": "i"}
        columns |= {"number": "u"} if "number" in self._handle["frames"] else {}
        columns |= {"gain": "f"} if "gain" in self._handle["frames"] else {}
        count = self._check_columns("frames", columns)
        image = self._handle.get("frames/image")
        if not isinstance(image, h5py.Dataset):
            raise self._refuse("/frames/image is required and missing")
        if (
            image.dtype not in (np.uint8, np.uint16)
            or image.ndim not in (3, 4)
            or (image.ndim == 4 and image.shape[3] != 3)
        ):
            raise self._refuse(
                "/frames/image must be uint8 or uint16 of shape (N, H, W) or (N, H, W, 3), "
                f"got {image.dtype} {image.shape}"
            )
        if len(image) != count and not self.growing:
            raise self._refuse(f"/frames/image has {len(image)} pictures, but /frames/t_start has {count} stamps")
        read = {name: self._handle[f"frames/{name}"][: min(count, len(image))] for name in columns}
        return FrameTable(
            read["t_start"].astype(np.int64),
            read["exposure"].astype(np.int64),
            read.get("number"),
            read.get("gain"),
            tuple(image.shape[1:]),
            image.dtype,
        )

    def _attribute_json(self, name: str) -> Any:
        text = self._handle.attrs.get(name)
        if text is None:
            return None
        try:
            return json.loads(text)
        except (TypeError, ValueError):
            raise self._refuse(f"attribute '{name}' must be JSON text, got {text!r:.60}") from None

    @property
    def module(self) -> HybridModule | None:
        """The nominal module that the recording names, or None."""
        text = self._handle.attrs.get("module")
        return None if text is None else parse_module(text, f"{self.path}: attribute 'module'")

    @property
    def settings(self) -> dict[str, Any] | None:
        """The settings it was recorded under, or None."""
        return self._attribute_json("settings")

    @property
    def t_resolution_ns(self) -> float | None:
        """Resolution of the event stamps, where stated."""
        value = self._handle.attrs.get("t_resolution_ns")
        return None if value is None else float(value)

    def digest(self) -> str:
        """SHA-256 of the file, in hexadecimal."""
        with open(self.path, "rb") as handle:
            return hashlib.file_digest(handle, "sha256").hexdigest()

    def require_events(self) -> None:
        """Raise DegenerateDataError where there are no events."""
        if not self.event_count:
            raise DegenerateDataError(f"{self.path}: events are required, and the recording holds none")

    def require_frames(self, at_least: int = 1) -> None:
        """Raise DegenerateDataError where there are too few frames."""
        if len(self.frames) < at_least:
            raise DegenerateDataError(
                f"{self.path}: at least {at_least} frames are required, and the recording holds {len(self.frames)}"
            )

    def _read_stamp(self, index: int) -> int:
        return int(self._handle["events/t"][index])

    @property
    def event_span_ns(self) -> tuple[int, int]:
        """First and last event stamp. Raises DegenerateDataError where there are no events."""
        self.require_events()
        return self._element(0), self._element(self.event_count - 1)

    def event_index(self, t_ns: int) -> int:
        """Index of the first event at or after `t_ns`."""
        low, high = 0, self.event_count
        while low < high:
            middle = (low + high) // 2
            if self._element(middle) < t_ns:
                low = middle + 1
            else:
                high = middle
        return low

    def _read_events(self, start: int, stop: int) -> Events:
        if stop <= start:
            return Events.empty()
        group = self._handle["events"]
        try:
            t = group["t"][start:stop].astype(np.int64, copy=False)
            x, y = (group[name][start:stop].astype(np.uint16, copy=False) for name in ("x", "y"))
            on = group["on"][start:stop].astype(np.uint8, copy=False)
        except OSError as error:
            raise self._refuse(f"events {start} to {stop} can't be read ({error})") from None
        return Events(t, x, y, on)

    def events(self, t0_ns: int | None = None, t1_ns: int | None = None) -> Events:
        """Events with `t0_ns <= t < t1_ns`; an open end is the recording's."""
        start = 0 if t0_ns is None else self.event_index(t0_ns)
        stop = self.event_count if t1_ns is None else self.event_index(t1_ns)
        return self._read_events(start, stop)

    def event_blocks(
        self, t0_ns: int | None = None, t1_ns: int | None = None, size: int = 1 << 20, check_order: bool = True
    ) -> Iterator[Events]:
        """Yield the events of a time range in blocks of `size`.

        Raises FileFormatError at the first stamp that runs backwards, for every estimator relies on the order;
        `check_order=False` is for the health check, which counts such steps.
        """
        start = 0 if t0_ns is None else self.event_index(t0_ns)
        stop = self.event_count if t1_ns is None else self.event_index(t1_ns)
        last = np.iinfo(np.int64).min
        for begin in range(start, stop, size):
            block = self._read_events(begin, min(begin + size, stop))
            if check_order and (block.t[0] < last or np.any(block.t[1:] < block.t[:-1])):
                end = begin + len(block)
                raise self._refuse(f"event stamps must not run backwards, and do in events {begin} to {end}")
            last = int(block.t[-1])
            yield block

    def frame_image(self, index: int) -> Array:
        """One picture, as stored: (H, W) or (H, W, 3), uint8 or uint16."""
        try:
            return self._handle["frames/image"][index]
        except OSError as error:
            raise self._refuse(f"frame {index} can't be read ({error})") from None

    @property
    def imu(self) -> Imu | None:
        """Inertial samples, or None."""
        if not self._check_columns("imu", {"t": "i", "gyro": "f", "accel": "f"}):
            return None
        group = self._handle["imu"]
        gyro, accel = group["gyro"][:].astype(float), group["accel"][:].astype(float)
        if gyro.shape[1:] != (3,) or accel.shape[1:] != (3,):
            raise self._refuse(f"/imu/gyro and /imu/accel must be (N, 3), got {gyro.shape} and {accel.shape}")
        return Imu(group["t"][:].astype(np.int64), gyro, accel)

    @property
    def triggers(self) -> Triggers | None:
        """Hardware edges, or None."""
        if not self._check_columns("triggers", {"t": "i", "channel": "u", "edge": "i"}):
            return None
        group = self._handle["triggers"]
        return Triggers(*(group[name][:] for name in ("t", "channel", "edge")))

    @property
    def events_lost(self) -> Array:
        """Intervals (K, 2) ns in which the module says that it dropped events."""
        if not self._check_columns("events_lost", {"t0": "i", "t1": "i"}):
            return np.empty((0, 2), np.int64)
        group = self._handle["events_lost"]
        return np.stack([group["t0"][:], group["t1"][:]], axis=1).astype(np.int64)

    def side(self, name: str) -> Series | None:
        """Side channel `activity` or `ambient`, or None."""
        if not self._check_columns(f"side/{name}", {"t": "i", "value": "f"}):
            return None
        group = self._handle[f"side/{name}"]
        return Series(group["t"][:].astype(np.int64), group["value"][:].astype(float))
