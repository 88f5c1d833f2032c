"""Read the ground truth of a synthetic recording. Only what scores may import this; a structural test keeps it so."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hybridtrack.errors import FileFormatError
from hybridtrack.geometry import se3
from hybridtrack.module import HybridModule, parse_module
from hybridtrack.recording.arrays import Array
from hybridtrack.recording.reader import open_checked


@dataclass(frozen=True)
class Truth:
    """`pose_t_ns` int64 (N,) event clock; `world_from_camera` (N, 4, 4); the true module; further arrays by name."""

    pose_t_ns: Array
    world_from_camera: Array
    module: HybridModule | None
    extras: dict[str, Array]


def read_truth(path: Path | str) -> Truth:
    """Read `/truth`. Raises FileFormatError where the recording has none."""
    with open_checked(path) as handle:
        if "truth/pose" not in handle:
            raise FileFormatError(f"{path}: ground truth is required here, and /truth/pose is missing")
        group = handle["truth"]
        text = group["module"][()] if "module" in group else None
        extras = {name: group[name][()] for name in group if name not in ("pose_t", "pose", "module")}
        return Truth(
            group["pose_t"][:].astype(np.int64),
            se3.from_position_quaternion(group["pose"][:].astype(float)),
            None if text is None else parse_module(text, f"{path}: /truth/module"),
            extras,
        )
