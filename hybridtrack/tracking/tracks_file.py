"""Tracks, and their HDF5 file `*.tracks.h5`: layout `hybridtrack-tracks`, version 1."""

import json
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from hybridtrack.errors import FileFormatError, MissingFileError, ShapeError
from hybridtrack.files import replacing
from hybridtrack.tracking.track_state import REASONS, SOURCES, STATES

Array = np.ndarray
LAYOUT = "hybridtrack-tracks"
COLUMNS = {
    "id": np.int64,
    "t": np.int64,
    "u": np.float64,
    "v": np.float64,
    "cov_uu": np.float32,
    "cov_uv": np.float32,
    "cov_vv": np.float32,
    "state": np.uint8,
    "reason": np.uint8,
    "source": np.uint8,
}


@dataclass(frozen=True)
class Tracks:
    """Observations of features, one a line.

    `id` int64 (N,); `t_ns` int64 (N,) event clock; `uv` float64 (N, 2) raw (distorted) colour-array px; `cov`
    float32 (N, 3) as uu, uv, vv in px^2; `state`, `reason`, `source` uint8 (N,), indices into `states`, `reasons`
    and `sources`.
    """

    id: Array
    t_ns: Array
    uv: Array
    cov: Array
    state: Array
    reason: Array
    source: Array
    states: tuple[str, ...] = STATES
    reasons: tuple[str, ...] = REASONS
    sources: tuple[str, ...] = SOURCES

    def __post_init__(self) -> None:
        count = len(self.id)
        shapes = {"uv": (count, 2), "cov": (count, 3)}
        for name in ("t_ns", "uv", "cov", "state", "reason", "source"):
            wanted, received = shapes.get(name, (count,)), np.shape(getattr(self, name))
            if received != wanted:
                raise ShapeError(f"Expected `{name}` of shape {wanted}, got {received}.")

    def __len__(self) -> int:
        return len(self.id)

    def __getitem__(self, selection: slice | Array) -> "Tracks":
        """Select lines by slice, mask or index array."""
        columns: dict[str, Any] = {name: getattr(self, name)[selection] for name in _array_names()}
        return replace(self, **columns)

    @staticmethod
    def empty() -> "Tracks":
        """No observations."""
        whole, flag = np.empty(0, np.int64), np.empty(0, np.uint8)
        return Tracks(whole, whole, np.empty((0, 2)), np.empty((0, 3), np.float32), flag, flag, flag)

    @staticmethod
    def joined(parts: "list[Tracks]") -> "Tracks":
        """Concatenate parts that share their lists of names."""
        if not parts:
            return Tracks.empty()
        first = parts[0]
        columns: dict[str, Any] = {n: np.concatenate([getattr(part, n) for part in parts]) for n in _array_names()}
        return replace(first, **columns)

    def in_order(self) -> "Tracks":
        """Sorted by time, then id; of lines with one time and id the last one given is kept."""
        order = np.lexsort((self.id, self.t_ns))
        ids, times = self.id[order], self.t_ns[order]
        keep = np.ones(len(order), bool)
        keep[:-1] = (ids[1:] != ids[:-1]) | (times[1:] != times[:-1])
        return self[order[keep]]

    def of(self, identity: int) -> "Tracks":
        """The lines of one feature."""
        return self[self.id == identity]

    def with_state(self, name: str) -> Array:
        """Mask (N,) of the lines in the named state. Raises ShapeError for a name that is not in `states`."""
        if name not in self.states:
            raise ShapeError(f"Expected a state of {self.states}, got '{name}'.")
        return self.state == self.states.index(name)


def _array_names() -> tuple[str, ...]:
    return tuple(field.name for field in fields(Tracks) if field.name not in ("states", "reasons", "sources"))


def write_tracks(path: Path | str, tracks: Tracks) -> None:
    """Write tracks sorted by time, then id, atomically."""
    ordered = tracks.in_order()
    columns = dict(
        zip(
            COLUMNS,
            (ordered.id, ordered.t_ns, *ordered.uv.T, *ordered.cov.T, ordered.state, ordered.reason, ordered.source),
            strict=True,
        )
    )
    with replacing(path) as temporary, h5py.File(temporary, "w") as handle:
        handle.attrs["format"], handle.attrs["version"] = LAYOUT, 1
        for name in ("states", "reasons", "sources"):
            handle.attrs[name] = json.dumps(list(getattr(ordered, name)))
        for name, kind in COLUMNS.items():
            values = np.ascontiguousarray(columns[name], dtype=kind)
            options = {"compression": "gzip", "compression_opts": 1, "shuffle": True} if len(values) else {}
            handle.create_dataset(f"tracks/{name}", data=values, **options)


def read_tracks(path: Path | str) -> Tracks:
    """Read tracks. Raises MissingFileError, or FileFormatError with the field at fault."""
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a tracks file (HDF5), found no such file")
    try:
        handle = h5py.File(file, "r")
    except OSError:
        raise FileFormatError(f"{file}: expected an HDF5 tracks file, but it is truncated or of another kind") from None
    with handle:
        if handle.attrs.get("format") != LAYOUT:
            raise FileFormatError(f"{file}: expected attribute format='{LAYOUT}', got {handle.attrs.get('format')!r}")
        version = handle.attrs.get("version")
        if version is None or int(version) != 1:
            raise FileFormatError(f"{file}: expected {LAYOUT} version 1, got {version!r}")
        names = [_read_names(handle, file, name) for name in ("states", "reasons", "sources")]
        read = {name: _read_column(handle, file, name) for name in COLUMNS}
    lengths = {name: len(values) for name, values in read.items()}
    if len(set(lengths.values())) > 1:
        raise FileFormatError(f"{file}: columns of /tracks must have one length, got {lengths}")
    for column, allowed in zip(("state", "reason", "source"), names, strict=True):
        if len(read[column]) and read[column].max() >= len(allowed):
            raise FileFormatError(f"{file}: /tracks/{column} must index {len(allowed)} names, got {read[column].max()}")
    return Tracks(
        read["id"],
        read["t"],
        np.stack([read["u"], read["v"]], axis=1),
        np.stack([read["cov_uu"], read["cov_uv"], read["cov_vv"]], axis=1),
        read["state"],
        read["reason"],
        read["source"],
        *names,
    )


def _read_column(handle: h5py.File, file: Path, name: str) -> Array:
    data = handle.get(f"tracks/{name}")
    if not isinstance(data, h5py.Dataset) or data.ndim != 1:
        raise FileFormatError(f"{file}: /tracks/{name} is required and missing")
    kind = COLUMNS[name]
    if data.dtype.kind not in ("iub" if np.dtype(kind).kind in "iu" else "fiu"):
        raise FileFormatError(f"{file}: /tracks/{name} must be {np.dtype(kind).name}, got {data.dtype}")
    return data[:].astype(kind)


def _read_names(handle: h5py.File, file: Path, name: str) -> tuple[str, ...]:
    try:
        listed = json.loads(handle.attrs.get(name))
    except (TypeError, ValueError):
        listed = None
    if not isinstance(listed, list) or not all(isinstance(entry, str) for entry in listed):
        raise FileFormatError(f"{file}: attribute '{name}' must be a JSON list of names")
    return tuple(listed)
