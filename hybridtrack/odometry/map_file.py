"""The sparse map as a PLY file: stray points taken out, colours from the frames."""

from collections.abc import Callable
from pathlib import Path

import numpy as np

from hybridtrack.files import replacing
from hybridtrack.module import FrameMode
from hybridtrack.odometry.pictures import point_colours
from hybridtrack.odometry.result import MapPoints

Array = np.ndarray

NEIGHBOURS = 12
STRAY_DEVIATIONS = 2.5
FEWEST_RAYS = 3


def colours_of(points: MapPoints, picture: Callable[[int], Array], mode: FrameMode) -> Array:
    """RGB (P, 3) in 0..1, each point's from the frame that saw it."""
    colours = np.zeros((len(points.positions), 3))
    for frame in np.unique(points.frame).tolist():
        rows = np.flatnonzero(points.frame == frame)
        colours[rows] = point_colours(picture(frame), mode, points.uv[rows])
    return colours


def stray(positions: Array) -> Array:
    """Mask (P,) of points whose distance to their neighbours stands out (statistical outlier removal, Rusu et al. 2008,
    by Open3D)."""
    if len(positions) <= NEIGHBOURS:
        return np.zeros(len(positions), bool)
    import open3d

    cloud = open3d.geometry.PointCloud(open3d.utility.Vector3dVector(positions))
    _, kept = cloud.remove_statistical_outlier(NEIGHBOURS, STRAY_DEVIATIONS)
    mask = np.ones(len(positions), bool)
    mask[np.asarray(kept, dtype=np.int64)] = False
    return mask


def write_map(path: Path | str, points: MapPoints) -> int:
    """Write the points that are seen often enough and do not stray; return how many. Atomic."""
    import open3d

    kept = np.flatnonzero(points.rays >= FEWEST_RAYS)
    kept = kept[~stray(points.positions[kept])]
    cloud = open3d.geometry.PointCloud(open3d.utility.Vector3dVector(points.positions[kept]))
    cloud.colors = open3d.utility.Vector3dVector(points.colours[kept])
    with replacing(path) as temporary:
        # Open3D chooses the format by the ending of the name.
        written = temporary.with_name(temporary.name + ".ply")
        try:
            open3d.io.write_point_cloud(str(written), cloud)
            written.replace(temporary)
        finally:
            written.unlink(missing_ok=True)
    return len(kept)
