"""The trajectory: a pose a frame with its covariance, health and segment, and its CSV file.

Layout: `t_ns,px_m,py_m,pz_m,qx,qy,qz,qw,health,segment` and the 21 covariance columns `c00` to `c55`, the upper
triangle of the covariance of the right perturbation (translation, rotation vector). A lost line has empty fields but
for its time and health. Where the scale is not known the unit called metre is the trajectory's own.
"""

import csv
import io
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hybridtrack.errors import FileFormatError, MissingFileError, ShapeError
from hybridtrack.files import write_text
from hybridtrack.geometry import se3

Array = np.ndarray

OK, WEAK, LOST = "ok", "weak", "lost"
HEALTHS = (OK, WEAK, LOST)
UPPER = np.triu_indices(6)
COVARIANCE_COLUMNS = tuple(f"c{i}{j}" for i, j in zip(*UPPER, strict=True))
COLUMNS = ("t_ns", "px_m", "py_m", "pz_m", "qx", "qy", "qz", "qw", "health", "segment", *COVARIANCE_COLUMNS)


@dataclass(frozen=True, eq=False)
class Trajectory:
    """`t_ns` int64 (N,) event clock, non-decreasing; `world_from_camera` (N, 4, 4) and `covariance` (N, 6, 6), NaN
    where lost; `health` (N,) of ok, weak, lost; `segment` int64 (N,), -1 where lost."""

    t_ns: Array
    world_from_camera: Array
    health: Array
    segment: Array
    covariance: Array

    def __post_init__(self) -> None:
        count = len(self.t_ns)
        wanted = {
            "world_from_camera": (count, 4, 4),
            "health": (count,),
            "segment": (count,),
            "covariance": (count, 6, 6),
        }
        for name, shape in wanted.items():
            if np.shape(getattr(self, name)) != shape:
                raise ShapeError(f"Expected `{name}` of shape {shape}, got {np.shape(getattr(self, name))}.")

    def __len__(self) -> int:
        return len(self.t_ns)

    @property
    def found(self) -> Array:
        """Mask (N,) of the lines that have a pose."""
        return self.health != LOST


def _line(trajectory: Trajectory, row: int) -> list[str]:
    if trajectory.health[row] == LOST:
        return [str(int(trajectory.t_ns[row])), *[""] * 7, LOST, "", *[""] * 21]
    pose = se3.to_position_quaternion(trajectory.world_from_camera[row])
    covariance = trajectory.covariance[row][UPPER]
    numbers = ["" if not np.isfinite(c) else f"{c:.9g}" for c in covariance]
    return [
        str(int(trajectory.t_ns[row])),
        *[f"{value:.12g}" for value in pose],
        str(trajectory.health[row]),
        str(int(trajectory.segment[row])),
        *numbers,
    ]


def write_trajectory(path: Path | str, trajectory: Trajectory) -> None:
    """Write the CSV atomically. A covariance that is not known leaves its fields empty."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(COLUMNS)
    writer.writerows(_line(trajectory, row) for row in range(len(trajectory)))
    write_text(path, text.getvalue())


def _parsed(fields: dict[str, str], where: str) -> tuple[int, Array, str, int, Array]:
    """One line as time, pose (4, 4), health, segment, covariance (6, 6). Raises FileFormatError."""
    health = fields["health"]
    if health not in HEALTHS:
        raise FileFormatError(f"{where}: health must be one of {', '.join(HEALTHS)}, got {health!r}")
    pose, covariance, segment = np.full((4, 4), np.nan), np.full((6, 6), np.nan), -1
    try:
        t_ns = int(fields["t_ns"])
        if health != LOST:
            pose = se3.from_position_quaternion([float(fields[name]) for name in COLUMNS[1:8]])
            segment = int(fields["segment"])
            if fields["c00"]:
                covariance[UPPER] = [float(fields[name]) for name in COVARIANCE_COLUMNS]
                covariance = np.where(np.isnan(covariance), covariance.T, covariance)
    except (ValueError, TypeError) as error:
        raise FileFormatError(
            f"{where}: expected numbers in every field of a line that is not lost ({error})"
        ) from None
    return t_ns, pose, health, segment, covariance


def read_trajectory(path: Path | str) -> Trajectory:
    """Read a trajectory. Raises MissingFileError, or FileFormatError with the line at fault."""
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a trajectory (CSV), found no such file")
    with open(file, newline="", encoding="utf-8") as handle:
        reader = csv.DictReader(handle)
        missing = [name for name in COLUMNS if name not in (reader.fieldnames or [])]
        if missing:
            raise FileFormatError(f"{file}: column '{missing[0]}' is required and missing")
        lines = [_parsed(fields, f"{file}: line {number}") for number, fields in enumerate(reader, start=2)]
    columns = list(zip(*lines, strict=True)) if lines else [[], [], [], [], []]
    return Trajectory(
        np.array(columns[0], dtype=np.int64),
        np.array(columns[1], dtype=float).reshape(-1, 4, 4),
        np.array(columns[2], dtype="<U4"),
        np.array(columns[3], dtype=np.int64),
        np.array(columns[4], dtype=float).reshape(-1, 6, 6),
    )
