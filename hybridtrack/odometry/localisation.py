"""Pose of one frame from rays to known points.

Robust Gauss-Newton on the right perturbation of the pose, every ray at its own time (module `motion`). The cost is
Cauchy's, reweighted at each step (Holland and Welsch 1977). Where the prediction does not lead to enough inliers, a
pose is searched for by random samples of four points (Fischler and Bolles 1981; three-point solver of Ke and
Roumeliotis 2017, by OpenCV) on rays interpolated to one time, then refined in the same way.
"""

from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.geometry import se3, so3
from hybridtrack.odometry import kernels
from hybridtrack.odometry.motion import camera_from_frame, twist_between
from hybridtrack.odometry.observations import View
from hybridtrack.odometry.options import OdometryOptions

Array = np.ndarray

CAUCHY_WIDTH = 2.0
ITERATIONS = 15
SMALLEST_STEP = 1e-6  # in chi-square: a thousandth of a standard deviation
SMALLEST_EIGENVALUE = 1e-9  # of the normal equations with a unit diagonal
SMALLEST_AXIAL = 0.17  # rays more than 80 degrees off the axis have no useful pinhole coordinates


@dataclass(frozen=True, eq=False)
class PoseEstimate:
    """`world_from_camera` (4, 4), body `twist` (6,) 1/s, `inliers` (N,) bool, `sigmas` (N,) residual over its
    deviation.

    `covariance` (6, 6) of the right perturbation, from the inliers' normal equations with the points taken as known.
    """

    world_from_camera: Array
    twist: Array
    inliers: Array
    sigmas: Array
    covariance: Array

    @property
    def inlier_count(self) -> int:
        return int(np.count_nonzero(self.inliers))


@dataclass(frozen=True, eq=False)
class Approach:
    """Where the camera came from: pose (4, 4) `dt_s` earlier. It turns a pose into a twist, and a twist into a
    guess."""

    world_from_previous: Array
    dt_s: float

    def twist_to(self, pose: Array) -> Array:
        """Body twist (6,) that ends in `pose`."""
        return twist_between(self.world_from_previous, pose, self.dt_s)


class _Equations:
    """Normal equations of one pose over its rays, each at its own time.

    The twist is fixed, or follows from the pose: then it changes by xi / dt when the pose moves by xi, and the pose at
    a ray's time moves by (1 + dt_ray / dt) xi to first order in the motion between frames.
    """

    def __init__(self, view: View, points: Array, motion: Approach | Array) -> None:
        self.view, self.points = view, np.ascontiguousarray(points, dtype=float)
        self.H, self.g, self.norms = np.empty((6, 6)), np.empty(6), np.zeros(len(view))
        self._motion = motion
        self._growth = np.ones(len(view))
        if isinstance(motion, Approach):
            self._growth += view.dt_s / motion.dt_s
        else:
            self._set_twist(motion)

    def _set_twist(self, twist: Array) -> None:
        self.twist = twist
        motion = camera_from_frame(twist, self.view.dt_s)
        self._turns = np.ascontiguousarray(motion[:, :3, :3])
        self._shifts = np.ascontiguousarray(motion[:, :3, 3])

    def fill(self, pose: Array, width: float) -> None:
        """Fill H, g and norms at a pose (4, 4) under Cauchy's cost; width zero: without, and only finite norms."""
        if isinstance(self._motion, Approach):
            self._set_twist(self._motion.twist_to(pose))
        kernels.pose_equations(
            np.ascontiguousarray(pose[:3, :3]),
            np.ascontiguousarray(pose[:3, 3]),
            self.points,
            self._turns,
            self._shifts,
            self.view.rays,
            self.view.whitening,
            self._growth,
            width,
            self.H,
            self.g,
            self.norms,
        )

    def converge(self, pose: Array) -> Array | None:
        """Gauss-Newton from `pose` (4, 4); None where the equations are singular."""
        for _ in range(ITERATIONS):
            self.fill(pose, CAUCHY_WIDTH)
            try:
                step = -np.linalg.solve(self.H, self.g)
            except np.linalg.LinAlgError:
                return None
            if not np.isfinite(step).all():
                return None
            pose = pose @ se3.exp(step)
            if step @ self.H @ step < SMALLEST_STEP:
                break
        return pose

    def covariance(self, pose: Array, inliers: Array) -> Array | None:
        """Covariance (6, 6) from the inliers (N,) at `pose`, or None where they do not determine it."""
        if 2 * np.count_nonzero(inliers) < 6:
            return None
        self.norms[:] = np.where(inliers, 0.0, np.inf)
        self.fill(pose, 0.0)
        size = np.sqrt(np.diag(self.H))
        if not (size > 0).all():
            return None
        scaled = self.H / np.outer(size, size)
        if np.linalg.eigvalsh(scaled)[0] < SMALLEST_EIGENVALUE:
            return None
        return np.linalg.inv(scaled) / np.outer(size, size)


def refine_pose(
    view: View, points: Array, start: Array, motion: Approach | Array, inlier_sigma: float = 4.0
) -> PoseEstimate | None:
    """Refine `start` (4, 4) on rays to `points` (N, 3); None where the equations do not determine a pose.

    `motion`: the pose before, from which the twist follows, or a fixed twist (6,).
    """
    equations = _Equations(view, points, motion)
    pose = equations.converge(start)
    if pose is None:
        return None
    equations.fill(pose, CAUCHY_WIDTH)
    sigmas = equations.norms.copy()
    inliers = sigmas < inlier_sigma
    covariance = equations.covariance(pose, inliers)
    return None if covariance is None else PoseEstimate(pose, equations.twist, inliers, sigmas, covariance)


def search_pose(view: View, points: Array, options: OdometryOptions) -> Array | None:
    """A pose (4, 4) that many rays agree on, found without a guess; None where there is none."""
    rays = view.rays_at_frame
    front = rays[:, 2] > SMALLEST_AXIAL
    if np.count_nonzero(front) < max(options.min_inliers, 6):
        return None
    plane = rays[front, :2] / rays[front, 2:]
    cv2.setRNGSeed(options.seed)
    found, rotation, translation, inliers = cv2.solvePnPRansac(
        points[front].reshape(-1, 1, 3),
        plane.reshape(-1, 1, 2),
        np.eye(3),
        None,
        iterationsCount=300,
        reprojectionError=2.0 * options.inlier_sigma * view.ray_sigma_rad,
        confidence=0.999,
        flags=cv2.SOLVEPNP_AP3P,
    )
    if not found or inliers is None or len(inliers) < options.min_inliers:
        return None
    return np.asarray(se3.inverse(se3.compose(so3.exp(rotation[:, 0]), translation[:, 0])))


def enough(estimate: PoseEstimate | None, options: OdometryOptions) -> bool:
    """Whether a pose has the inliers that `ok` or `weak` ask for."""
    if estimate is None:
        return False
    wanted = max(options.min_inliers, options.min_inlier_share * len(estimate.inliers))
    return estimate.inlier_count >= wanted


def localise(
    view: View, points: Array, guess: Array | None, approach: Approach | None, options: OdometryOptions
) -> PoseEstimate | None:
    """Pose of a view whose rays (N) look at `points` (N, 3); None where no pose has enough inliers.

    `guess` (4, 4) and `approach` come from the frame before, and may be missing; without an approach the tracks' own
    motion stands for the twist, which is returned as zero.
    """
    if len(view) < options.min_inliers:
        return None
    motion: Approach | Array = np.zeros(6) if approach is None else approach
    if approach is None:
        view = view.at_frame_time()
    if guess is not None:
        estimate = refine_pose(view, points, guess, motion, options.inlier_sigma)
        if enough(estimate, options):
            return estimate
    found = search_pose(view, points, options)
    if found is None:
        return None
    estimate = refine_pose(view, points, found, motion, options.inlier_sigma)
    return estimate if enough(estimate, options) else None
