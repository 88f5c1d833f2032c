"""Write a recording block by block in constant memory; the finished file appears at once, whole or not at all."""

import json
import os
from pathlib import Path
from types import TracebackType
from typing import Any

import h5py
import hdf5plugin
import numpy as np

from hybridtrack.errors import ShapeError
from hybridtrack.module import HybridModule
from hybridtrack.recording.arrays import Array
from hybridtrack.recording.reader import LAYOUT

EVENT_CHUNK = 1 << 16


class RecordingWriter:
    """Append events and frames, set the rest, and leave the `with` block to put the file in place.

    An exception inside the block leaves no file, and an older file of that name as it was.
    """

    def __init__(
        self,
        path: Path | str,
        module: HybridModule | None = None,
        settings: dict[str, Any] | None = None,
        t_resolution_ns: float | None = None,
    ) -> None:
        self.path = Path(path)
        self.path.parent.mkdir(parents=True, exist_ok=True)
        self._temporary = self.path.with_name(f".{self.path.name}.{os.getpid()}.partial")
        self._handle = h5py.File(self._temporary, "w")
        self._last_t = np.iinfo(np.int64).min
        attributes = self._handle.attrs
        attributes["format"], attributes["version"] = LAYOUT, 1
        if module is not None:
            attributes["module"] = module.model_dump_json()
        if settings is not None:
            attributes["settings"] = json.dumps(settings)
        if t_resolution_ns is not None:
            attributes["t_resolution_ns"] = float(t_resolution_ns)
        for name, kind in (("t", np.int64), ("x", np.uint16), ("y", np.uint16), ("on", np.uint8)):
            self._create(f"events/{name}", (0,), kind, (EVENT_CHUNK,))

    def __enter__(self) -> "RecordingWriter":
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        if kind is None:
            self.close()
        else:
            self.abandon()

    def close(self) -> None:
        """Flush to disk and put the file in place."""
        self._handle.flush()
        self._handle.close()
        with open(self._temporary, "rb") as handle:
            os.fsync(handle.fileno())
        os.replace(self._temporary, self.path)

    def abandon(self) -> None:
        """Drop what was written."""
        self._handle.close()
        self._temporary.unlink(missing_ok=True)

    def _create(self, name: str, shape: tuple[int, ...], dtype: Any, chunks: tuple[int, ...]) -> h5py.Dataset:
        return self._handle.create_dataset(
            name, shape, dtype, maxshape=(None, *shape[1:]), chunks=chunks, compression=hdf5plugin.Bitshuffle()
        )

    def _append(self, name: str, values: Array) -> None:
        data = self._handle[name]
        start = len(data)
        data.resize(start + len(values), axis=0)
        data[start:] = values

    def append_events(self, t: Array, x: Array, y: Array, on: Array) -> None:
        """Append events (N,): int64 ns, column, row, 1 for ON. Raises ShapeError where stamps run backwards."""
        if not len(t) == len(x) == len(y) == len(on):
            raise ShapeError(f"Expected event columns of one length, got {len(t)}, {len(x)}, {len(y)}, {len(on)}.")
        if not len(t):
            return
        if t[0] < self._last_t or np.any(np.diff(t) < 0):
            raise ShapeError("Expected event stamps that do not run backwards, got a step back.")
        self._last_t = int(t[-1])
        for name, values in (("t", t), ("x", x), ("y", y), ("on", on)):
            self._append(f"events/{name}", values)

    def append_frames(
        self,
        images: Array,
        t_start_ns: Array,
        exposure_ns: Array,
        number: Array | None = None,
        gain: Array | None = None,
    ) -> None:
        """Append pictures (N, H, W[, 3]), stamps and exposures (N,) ns; `number`, `gain` on all calls or none."""
        images = np.asarray(images)
        if "frames" not in self._handle:
            self._create("frames/image", (0, *images.shape[1:]), images.dtype, (1, *images.shape[1:]))
            self._create("frames/t_start", (0,), np.int64, (1024,))
            self._create("frames/exposure", (0,), np.int64, (1024,))
            if number is not None:
                self._create("frames/number", (0,), np.uint64, (1024,))
            if gain is not None:
                self._create("frames/gain", (0,), np.float64, (1024,))
        columns = {"image": images, "t_start": t_start_ns, "exposure": exposure_ns, "number": number, "gain": gain}
        for name, values in columns.items():
            if (values is None) != (name not in self._handle["frames"]):
                raise ShapeError(f"Expected frame column '{name}' on all calls or on none.")
            if values is not None:
                if len(values) != len(images):
                    raise ShapeError(f"Expected {len(images)} values of frame column '{name}', got {len(values)}.")
                self._append(f"frames/{name}", np.asarray(values))

    def set_group(self, group: str, **columns: Array) -> None:
        """Write a small group whole: `imu` (t, gyro, accel), `triggers` (t, channel, edge), `events_lost` (t0, t1),
        `side/activity` and `side/ambient` (t, value)."""
        for name, values in columns.items():
            self._handle.create_dataset(f"{group}/{name}", data=values)

    def set_truth(self, pose_t_ns: Array, pose: Array, module: HybridModule, **extras: Array) -> None:
        """Write ground truth: pose stamps (N,), poses (N, 7) as px py pz qx qy qz qw, and the true module."""
        self.set_group("truth", pose_t=np.asarray(pose_t_ns, np.int64), pose=np.asarray(pose, float), **extras)
        self._handle["truth"].create_dataset("module", data=module.model_dump_json())
