"""Candidate motions between two views: from the essential matrix (five points, Nister 2004) and from a homography
(decomposed as by Malis and Vargas 2007), both by random samples in OpenCV.

In a plane the essential matrix is not determined, in depth the homography does not exist; which one applies is not
guessed here. All candidates go to `startup`, which lets further views decide.
"""

import cv2
import numpy as np

from hybridtrack.errors import DegenerateDataError
from hybridtrack.geometry import se3, so3
from hybridtrack.odometry.observations import View

Array = np.ndarray

SMALLEST_AXIAL = 0.17
GATE_SIGMA = 3.0


def shared_rows(a: View, b: View) -> tuple[Array, Array]:
    """Rows of the tracks that two views share, in the same order."""
    _, rows_a, rows_b = np.intersect1d(a.ids, b.ids, assume_unique=True, return_indices=True)
    return rows_a, rows_b


def rotation_between(rays_a: Array, rays_b: Array, rounds: int = 5) -> tuple[Array, Array]:
    """Rotation (3, 3) that best takes rays a to rays b (N, 3), and the angles left (N,) rad; robust by reweighting."""
    weight = np.ones(len(rays_a))
    turn = np.eye(3)
    angles = np.zeros(len(rays_a))
    for _ in range(rounds):
        turn = so3.project_to_rotation((weight[:, None] * rays_b).T @ rays_a)
        angles = np.linalg.norm(np.cross(rays_a @ turn.T, rays_b), axis=1)
        weight = 1.0 / np.maximum(angles, max(0.2 * float(np.median(angles)), 1e-9))
    return turn, angles


def sigma_from_rotation(a: View, b: View) -> float:
    """Median disagreement of two views' shared rays with a pure rotation, in standard deviations; 0 without rays."""
    rows_a, rows_b = shared_rows(a, b)
    if len(rows_a) < 5:
        return 0.0
    try:
        _, angles = rotation_between(a.rays_at_frame[rows_a], b.rays_at_frame[rows_b])
    except DegenerateDataError:
        return 0.0
    return float(np.median(angles)) / (np.sqrt(2.0) * a.ray_sigma_rad)


def _in_pixels_of_sigma(view: View, rows: Array, focal: float) -> Array:
    rays = view.rays_at_frame[rows]
    return focal * rays[:, :2] / rays[:, 2:]


def _from_essential(points_a: Array, points_b: Array, camera: Array) -> list[Array]:
    matrix, _ = cv2.findEssentialMat(points_a, points_b, camera, cv2.USAC_ACCURATE, 0.999, GATE_SIGMA)
    if matrix is None or matrix.shape != (3, 3):
        return []
    turn_1, turn_2, shift = cv2.decomposeEssentialMat(matrix)
    return [se3.compose(turn, sign * shift[:, 0]) for turn in (turn_1, turn_2) for sign in (1.0, -1.0)]


def _from_homography(points_a: Array, points_b: Array, camera: Array) -> list[Array]:
    matrix, _ = cv2.findHomography(points_a, points_b, cv2.USAC_ACCURATE, GATE_SIGMA, maxIters=2000, confidence=0.999)
    if matrix is None:
        return []
    _, turns, shifts, _ = cv2.decomposeHomographyMat(matrix, camera)
    candidates = []
    for turn, shift in zip(turns, shifts, strict=True):
        length = float(np.linalg.norm(shift))
        if length > 1e-9 and np.isfinite(length) and abs(float(np.linalg.det(turn)) - 1.0) < 1e-3:
            candidates.append(se3.compose(so3.project_to_rotation(turn), shift[:, 0] / length))
    return candidates


def candidate_motions(a: View, b: View, seed: int) -> list[Array]:
    """Motions b_from_a (4, 4) with a baseline of one that the shared rays allow, up to eight."""
    rows_a, rows_b = shared_rows(a, b)
    front = (a.rays_at_frame[rows_a, 2] > SMALLEST_AXIAL) & (b.rays_at_frame[rows_b, 2] > SMALLEST_AXIAL)
    rows_a, rows_b = rows_a[front], rows_b[front]
    if len(rows_a) < 8:
        return []
    focal = 1.0 / a.ray_sigma_rad
    camera = np.diag([focal, focal, 1.0])
    points_a, points_b = _in_pixels_of_sigma(a, rows_a, focal), _in_pixels_of_sigma(b, rows_b, focal)
    cv2.setRNGSeed(seed)
    found = _from_essential(points_a, points_b, camera) + _from_homography(points_a, points_b, camera)
    return [np.asarray(motion) for motion in found if np.isfinite(motion).all()]
