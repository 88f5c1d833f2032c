"""Points to follow, from a CSV file with the header `id,t_ns,u,v`."""

import csv
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hybridtrack.errors import FileFormatError, MissingFileError, ShapeError
from hybridtrack.files import write_text

Array = np.ndarray
HEADER = ["id", "t_ns", "u", "v"]


@dataclass(frozen=True)
class Points:
    """Points to follow: `id` int64 (N,), unique; `t_ns` int64 (N,) event clock; `uv` float64 (N, 2) raw colour px."""

    id: Array
    t_ns: Array
    uv: Array

    def __post_init__(self) -> None:
        count = len(self.id)
        if np.shape(self.t_ns) != (count,) or np.shape(self.uv) != (count, 2):
            raise ShapeError(
                f"Expected `t_ns` of shape ({count},) and `uv` of shape ({count}, 2), "
                f"got {np.shape(self.t_ns)} and {np.shape(self.uv)}."
            )
        if len(np.unique(self.id)) != count:
            raise ShapeError("Expected every point's id once, got one twice.")

    def __len__(self) -> int:
        return len(self.id)


def write_points(path: Path | str, points: Points) -> None:
    """Write points as CSV, atomically."""
    lines = [",".join(HEADER)]
    lines += [f"{i},{t},{u!r},{v!r}" for i, t, (u, v) in zip(points.id, points.t_ns, points.uv.tolist(), strict=True)]
    write_text(path, "\n".join(lines) + "\n")


def read_points(path: Path | str) -> Points:
    """Read points. Raises MissingFileError, or FileFormatError with the line at fault."""
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a CSV file of points, found no such file")
    with open(file, newline="", encoding="utf-8-sig") as handle:
        try:
            rows = [row for row in csv.reader(handle) if row]
        except (UnicodeDecodeError, csv.Error) as error:
            raise FileFormatError(f"{file}: expected CSV text, got {error}") from None
    if not rows or [name.strip() for name in rows[0]] != HEADER:
        received = ",".join(rows[0]) if rows else ""
        raise FileFormatError(f"{file}: expected the header '{','.join(HEADER)}', got {received!r:.60}")
    identities, times, positions = [], [], []
    for number, row in enumerate(rows[1:], start=2):
        try:
            identity, time, u, v = row
            identities.append(int(identity))
            times.append(int(time))
            positions.append((float(u), float(v)))
        except ValueError:
            received = ",".join(row)
            wanted = f"{file}: line {number} must be two integers and two numbers"
            raise FileFormatError(f"{wanted}, got {received!r:.60}") from None
        if not np.all(np.isfinite(positions[-1])):
            raise FileFormatError(f"{file}: line {number}: u and v must be finite, got {u}, {v}")
        if identities[-1] < 0:
            raise FileFormatError(f"{file}: line {number}: id must not be negative, got {identity}")
    if len(set(identities)) != len(identities):
        twice = next(i for i in identities if identities.count(i) > 1)
        raise FileFormatError(f"{file}: every id must stand once, got {twice} twice")
    return Points(np.array(identities, np.int64), np.array(times, np.int64), np.array(positions, float).reshape(-1, 2))
