"""A first lens and first poses from board corners, good enough for bundle adjustment to converge.

For a trial focal length (all else nominal: centre of the array, no distortion) the corners become rays; a plane's
homography to the rays gives the pose, and its first two columns are orthonormal only if the focal length is right
(Zhang 2000). The trial with the least reprojection error wins; scanning it serves any lens model alike.
"""

import cv2
import numpy as np

from hybridtrack.calibration.bundle import Scene, ViewPoints
from hybridtrack.calibration.view_data import Lens
from hybridtrack.errors import DegenerateDataError
from hybridtrack.geometry import FisheyeLens, PerspectiveLens, se3, so3

Array = np.ndarray

_WIDEST_RAY = 1.35  # rad off the axis: rays beyond do not enter the first homography
_SCANNED_VIEWS = 8


def pose_from_homography(H: Array) -> Array:
    """camera_from_board (4, 4) from a homography of the board's plane to normalised picture coordinates."""
    H = H / np.sqrt(np.linalg.norm(H[:, 0]) * np.linalg.norm(H[:, 1]))
    if H[2, 2] < 0:
        H = -H
    columns = np.stack([H[:, 0], H[:, 1], np.cross(H[:, 0], H[:, 1])], axis=-1)
    return se3.compose(so3.project_to_rotation(columns), H[:, 2])


def start_pose(lens: Lens, points: ViewPoints) -> Array | None:
    """camera_from_board (4, 4) of one view under a given lens, or None where its rays do not span a homography."""
    rays = lens.unproject(points.uv, allow_outside=True)
    with np.errstate(invalid="ignore"):
        usable = rays[:, 2] > np.cos(_WIDEST_RAY)
    if usable.sum() < 6:
        return None
    flat = rays[usable, :2] / rays[usable, 2:]
    middle = points.board_m[:, :2].mean(0)
    H, _ = cv2.findHomography(points.board_m[usable, :2] - middle, flat, 0)
    if H is None or not np.all(np.isfinite(H)):
        return None
    centred = pose_from_homography(H)
    back = np.eye(4)
    back[:2, 3] = -middle
    return np.asarray(centred @ back)


def trial_lens(model: str, focal_px: float, width: int, height: int) -> Lens:
    """An undistorted lens of "perspective" or "fisheye" model, centred on the array."""
    centre = ((width - 1) / 2.0, (height - 1) / 2.0)
    return (FisheyeLens if model == "fisheye" else PerspectiveLens)(focal_px, focal_px, *centre)


def _start_error(lens: Lens, points: ViewPoints) -> float:
    """Median squared reprojection error of one view; infinite where the lens does not see it."""
    pose = start_pose(lens, points)
    if pose is None:
        return np.inf
    uv = lens.project(se3.transform(pose, points.board_m))
    if np.mean(np.isfinite(uv)) < 0.9:
        return np.inf
    # The median bears a few far corners that a lens without distortion misses.
    return float(np.nanmedian(np.sum((uv - points.uv) ** 2, axis=-1)))


def start_scene(model: str, views: list[ViewPoints], width: int, height: int) -> Scene:
    """The best trial lens and its poses. Raises DegenerateDataError where no focal length explains the views."""
    scanned = sorted(views, key=lambda points: -len(points.uv))[:_SCANNED_VIEWS]
    best: tuple[float, Lens] | None = None
    for focal in np.hypot(width, height) * np.geomspace(0.2, 4.0, 25):
        lens = trial_lens(model, float(focal), width, height)
        error = sum(_start_error(lens, points) for points in scanned)
        if np.isfinite(error) and (best is None or error < best[0]):
            best = (error, lens)
    poses = [None] if best is None else [start_pose(best[1], points) for points in views]
    if best is None or any(pose is None for pose in poses):
        raise DegenerateDataError("lens: expected board views that some focal length explains, got none that does")
    return Scene(best[1], np.array(poses))
