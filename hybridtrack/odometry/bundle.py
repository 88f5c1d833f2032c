"""Bundle adjustment over chosen poses and points (Triggs et al. 2000), Levenberg-Marquardt on the Schur complement.

Residuals and Jacobians are those of `observations` and `motion`: linear in the ray, at the ray's own time with the
frame's twist held. The cost is Huber's in standard deviations. Where only one pose is held, the pose farthest from it
keeps its distance: the scale is not observed, and twists that are held must keep theirs.

Covariance: the inverse of the reduced system under seven constraints that fix the gauge. They ask that a similarity
aligning the positions of the poses with the truth (Umeyama 1991) would be the identity to first order, so that the
covariance describes the errors that remain after such an alignment.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from hybridtrack.geometry import se3, so3
from hybridtrack.odometry import kernels

Array = np.ndarray

HUBER_WIDTH = 2.5
LARGEST_DAMPING = 1e8
ANCHOR_SHARE = 1e-4


@dataclass(frozen=True, eq=False)
class Bundle:
    """K poses, P points and M rays, sorted by point.

    `poses` (K, 4, 4) world_from_camera; `held` (K,) bool; `points` (P, 3); `pose_of`, `point_of` (M,) int64;
    `own_motion` (M, 4, 4) from axes at the frame's time to axes at the ray's; `rays` (M, 3); `whitening` (M, 2, 3).
    """

    poses: Array
    held: Array
    points: Array
    pose_of: Array
    point_of: Array
    own_motion: Array
    rays: Array
    whitening: Array


@dataclass(frozen=True, eq=False)
class Adjusted:
    """`poses` (K, 4, 4), `points` (P, 3), `sigmas` (M,) residual over its deviation (infinite behind the camera),
    robust `cost` and how many `iterations` it took."""

    poses: Array
    points: Array
    sigmas: Array
    cost: float
    iterations: int


def _rays_of(bundle: Bundle) -> tuple[Array, ...]:
    own_turns = np.ascontiguousarray(bundle.own_motion[:, :3, :3])
    own_shifts = np.ascontiguousarray(bundle.own_motion[:, :3, 3])
    return bundle.pose_of, bundle.point_of, own_turns, own_shifts


def _split(poses: Array) -> tuple[Array, Array]:
    return np.ascontiguousarray(poses[:, :3, :3]), np.ascontiguousarray(poses[:, :3, 3])


def residual_sigmas(bundle: Bundle, poses: Array, points: Array) -> Array:
    """Residual over its deviation (M,) of all rays; infinite where the point lies behind."""
    norms = np.empty(len(bundle.pose_of))
    kernels.residual_norms(*_split(poses), points, *_rays_of(bundle), bundle.rays, bundle.whitening, norms)
    return norms


def ray_residuals(bundle: Bundle, poses: Array, points: Array) -> Array:
    """Whitened residuals (M, 2) of all rays."""
    a, b = _split(poses)
    turned = np.einsum("nji,nj->ni", a[bundle.pose_of], points[bundle.point_of] - b[bundle.pose_of])
    local = np.einsum("nij,nj->ni", bundle.own_motion[:, :3, :3], turned) + bundle.own_motion[:, :3, 3]
    n = local / np.maximum(np.linalg.norm(local, axis=1, keepdims=True), 1e-12)
    return np.einsum("nij,nj->ni", bundle.whitening, n)


def _cost(sigmas: Array) -> float:
    """Huber's cost; a point behind a camera counts as a gross outlier."""
    s = np.minimum(sigmas, 1e6)
    return float(np.sum(np.where(s <= HUBER_WIDTH, s**2, 2.0 * HUBER_WIDTH * s - HUBER_WIDTH**2)))


def huber_weights(sigmas: Array) -> Array:
    """Weights (M,) of Huber's cost; zero behind the camera."""
    return np.where(np.isfinite(sigmas), HUBER_WIDTH / np.maximum(sigmas, HUBER_WIDTH), 0.0)


@dataclass(frozen=True, eq=False)
class System:
    """Normal equations of a bundle: pose blocks, point blocks, cross blocks and gradients, see `normal_equations`."""

    H_pose: Array
    g_pose: Array
    H_point: Array
    g_point: Array
    H_cross: Array


def linearised(bundle: Bundle, poses: Array, points: Array, weights: Array) -> System:
    """Normal equations of all rays at the given poses and points."""
    count, size, rays = len(poses), len(points), len(bundle.pose_of)
    system = System(
        np.zeros((count, 6, 6)),
        np.zeros((count, 6)),
        np.zeros((size, 3, 3)),
        np.zeros((size, 3)),
        np.zeros((rays, 6, 3)),
    )
    kernels.normal_equations(
        *_split(poses),
        points,
        *_rays_of(bundle),
        bundle.whitening,
        weights,
        system.H_pose,
        system.g_pose,
        system.H_point,
        system.g_point,
        system.H_cross,
    )
    return system


def _inverted_points(H_point: Array, damping: float) -> Array:
    """Inverses (P, 3, 3) of damped point blocks; a trace of the mean diagonal keeps blocks without rays regular."""
    across = np.arange(3)
    damped = H_point.copy()
    diagonal = H_point[:, across, across]
    floor = 1e-9 * diagonal.mean(axis=1, keepdims=True) + 1e-12
    damped[:, across, across] += damping * diagonal + floor
    return np.linalg.inv(damped)


class _Reduced:
    """The Schur complement of one system, for the poses that are free."""

    def __init__(self, bundle: Bundle) -> None:
        self.free = np.flatnonzero(~bundle.held)
        slots = np.full(len(bundle.held), -1, dtype=np.int64)
        slots[self.free] = np.arange(len(self.free))
        self.slot_of = slots[bundle.pose_of]
        self.starts = np.searchsorted(bundle.point_of, np.arange(len(bundle.points) + 1))

    def matrix(self, system: System, inverse: Array, damping: float) -> tuple[Array, Array]:
        """S (6F, 6F) and gradient (6F,)."""
        count = len(self.free)
        S, g = np.zeros((6 * count, 6 * count)), system.g_pose[self.free].ravel().copy()
        blocks = S.reshape(count, 6, count, 6)
        across = np.arange(count)
        damped = system.H_pose[self.free].copy()
        damped[:, np.arange(6), np.arange(6)] *= 1.0 + damping
        blocks[across, :, across, :] += damped
        kernels.reduce_points(self.starts, self.slot_of, inverse, system.g_point, system.H_cross, S, g)
        return S, g

    def step(self, system: System, damping: float) -> tuple[Array, Array] | None:
        """Steps of the free poses (F, 6) and of the points (P, 3); None where the system is not positive definite."""
        inverse = _inverted_points(system.H_point, damping)
        step = np.zeros((len(self.free), 6))
        if len(self.free):
            S, g = self.matrix(system, inverse, damping)
            try:
                step = -cho_solve(cho_factor(S, lower=True, check_finite=False), g).reshape(-1, 6)
            except (LinAlgError, ValueError):
                return None
        moves = np.empty((len(system.H_point), 3))
        kernels.point_steps(self.starts, self.slot_of, inverse, system.g_point, system.H_cross, step, moves)
        if not (np.isfinite(step).all() and np.isfinite(moves).all()):
            return None
        return step, moves


@dataclass(frozen=True, eq=False)
class _Anchor:
    """A pose that keeps its distance from the only held one, within a share `ANCHOR_SHARE` of it."""

    pose: int
    centre: Array
    distance: float

    def excess(self, poses: Array) -> float:
        """Deviation from the distance, in its standard deviation."""
        length = float(np.linalg.norm(poses[self.pose, :3, 3] - self.centre))
        return (length - self.distance) / (ANCHOR_SHARE * self.distance)

    def add_to(self, system: System, poses: Array) -> None:
        """Add its normal equations."""
        arm = poses[self.pose, :3, 3] - self.centre
        slope = poses[self.pose, :3, :3].T @ arm / np.linalg.norm(arm) / (ANCHOR_SHARE * self.distance)
        system.H_pose[self.pose, :3, :3] += np.outer(slope, slope)
        system.g_pose[self.pose, :3] += slope * self.excess(poses)


def _anchor_of(bundle: Bundle) -> _Anchor | None:
    held = np.flatnonzero(bundle.held)
    if len(held) != 1 or len(bundle.poses) < 2:
        return None
    centre = bundle.poses[held[0], :3, 3]
    distances = np.linalg.norm(bundle.poses[:, :3, 3] - centre, axis=1)
    farthest = int(np.argmax(distances))
    return _Anchor(farthest, centre.copy(), float(distances[farthest])) if distances[farthest] > 0 else None


def adjust(bundle: Bundle, iterations: int = 20, relative_decrease: float = 1e-4) -> Adjusted:
    """Minimise the robust cost from the bundle's own poses and points; stop at a small relative decrease."""
    poses, points = bundle.poses.copy(), np.ascontiguousarray(bundle.points, dtype=float)
    reduced, anchor = _Reduced(bundle), _anchor_of(bundle)

    def cost_of(trial_sigmas: Array, trial_poses: Array) -> float:
        return _cost(trial_sigmas) + (0.0 if anchor is None else anchor.excess(trial_poses) ** 2)

    sigmas = residual_sigmas(bundle, poses, points)
    cost, damping, done = cost_of(sigmas, poses), 1e-4, 0
    while done < iterations and damping < LARGEST_DAMPING:
        done += 1
        system = linearised(bundle, poses, points, huber_weights(sigmas))
        if anchor is not None:
            anchor.add_to(system, poses)
        improved = False
        while damping < LARGEST_DAMPING and not improved:
            step = reduced.step(system, damping)
            if step is not None:
                trial = poses.copy()
                trial[reduced.free] = poses[reduced.free] @ se3.exp(step[0])
                trial_points = points + step[1]
                trial_sigmas = residual_sigmas(bundle, trial, trial_points)
                trial_cost = cost_of(trial_sigmas, trial)
                improved = trial_cost <= cost
            damping = max(0.1 * damping, 1e-9) if improved else 8.0 * damping
        if not improved:
            break
        before, cost = cost, trial_cost
        poses, points, sigmas = trial, trial_points, trial_sigmas
        if before - cost <= relative_decrease * before + 1e-14:
            break
    poses[reduced.free, :3, :3] = so3.project_to_rotation(poses[reduced.free, :3, :3])
    return Adjusted(poses, points, sigmas, cost, done)


def gauge_constraints(poses: Array) -> Array:
    """C (7, 6K): no mean shift, turn or growth of the positions under right perturbations of `poses` (K, 4, 4)."""
    arms = poses[:, :3, 3] - poses[:, :3, 3].mean(axis=0)
    turns = poses[:, :3, :3]
    rows = np.zeros((7, len(poses), 6))
    rows[:3, :, :3] = turns.transpose(1, 0, 2)
    rows[3:6, :, :3] = (so3.hat(arms) @ turns).transpose(1, 0, 2)
    rows[6, :, :3] = np.einsum("ki,kij->kj", arms, turns)
    flat = rows.reshape(7, -1)
    return flat / np.maximum(np.linalg.norm(flat, axis=1, keepdims=True), 1e-300)


def pose_covariance(bundle: Bundle, adjusted: Adjusted) -> Array:
    """Joint covariance (6K, 6K) of all poses in the gauge of the module docstring, per unit variance of residuals.

    Held poses are taken as free: the gauge constraints replace them. Points count with their rays' robust weights.
    """
    free = Bundle(
        adjusted.poses,
        np.zeros(len(bundle.held), bool),
        adjusted.points,
        bundle.pose_of,
        bundle.point_of,
        bundle.own_motion,
        bundle.rays,
        bundle.whitening,
    )
    system = linearised(free, adjusted.poses, adjusted.points, huber_weights(adjusted.sigmas))
    S, _ = _Reduced(free).matrix(system, _inverted_points(system.H_point, 0.0), 0.0)
    scale = 1.0 / np.sqrt(np.maximum(np.diag(S), 1e-300))
    constraints = gauge_constraints(adjusted.poses) * scale
    constraints /= np.linalg.norm(constraints, axis=1, keepdims=True)
    size = len(S)
    bordered = np.zeros((size + 7, size + 7))
    bordered[:size, :size] = S * np.outer(scale, scale)
    bordered[size:, :size], bordered[:size, size:] = constraints, constraints.T
    inverse = np.linalg.inv(bordered)[:size, :size]
    return 0.5 * (inverse + inverse.T) * np.outer(scale, scale)
