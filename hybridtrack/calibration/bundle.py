"""Bundle adjustment of one lens, one board and one pose for each view (Triggs et al. 2000).

Levenberg-Marquardt on corners whitened by their covariances. Views share only the lens and the board's shape, so that
poses are eliminated by the Schur complement and the work is linear in views. Corners further than `_GROSS` robust
deviations from the fit are left out: all others count in full, so that without gross errors this is least squares.

The board may be a little out of shape: y stretched by 1 + `aspect`, and bowed out of its plane by `bow_x` and `bow_y`
metres from edge to middle. These are estimated only under a stated prior deviation.
"""

from dataclasses import dataclass, field, replace
from itertools import pairwise

import numpy as np

from hybridtrack.calibration.view_data import Lens
from hybridtrack.errors import OptionError
from hybridtrack.geometry import se3, so3

Array = np.ndarray

SHAPE_NAMES = ("board.aspect", "board.bow_x_m", "board.bow_y_m")
_GROSS = 6.0
_STEPS = 60


@dataclass(frozen=True)
class ViewPoints:
    """One view's corners: `board_m` (N, 3), `uv` (N, 2) px, `whiten` (N, 2, 2) with W^T W the inverse covariance."""

    board_m: Array
    uv: Array
    whiten: Array


@dataclass(frozen=True)
class Scene:
    """What the adjustment moves: lens, `shape` (3,) of the board, `poses` camera_from_board (V, 4, 4)."""

    lens: Lens
    poses: Array
    shape: Array = field(default_factory=lambda: np.zeros(3))


@dataclass(frozen=True)
class Freedom:
    """Which lens parameters are free, `lens` (P,) bool, and prior deviations `shape_sigma` (3,), 0 where fixed."""

    lens: Array
    shape_sigma: Array = field(default_factory=lambda: np.zeros(3))

    @property
    def shape(self) -> Array:
        """Which shape terms are free."""
        return self.shape_sigma > 0


@dataclass(frozen=True)
class Solution:
    """Adjusted scene with `residuals` [view] (N, 2) px (seen minus predicted), `used` [view] (N,) bool, `chi_square`
    of the used corners, `covariance` (S + 6V square: free lens and shape terms, then poses) for corner covariances as
    stated, and `condition` of the column-scaled Jacobian."""

    scene: Scene
    freedom: Freedom
    residuals: list[Array]
    used: list[Array]
    chi_square: float
    degrees_of_freedom: int
    covariance: Array
    condition: float
    scores: Array

    @property
    def shared(self) -> int:
        """How many lens and shape terms were free."""
        return int(self.freedom.lens.sum() + self.freedom.shape.sum())


def whitening(covariance: Array) -> Array:
    """W (N, 2, 2) with W^T W the inverse of `covariance` (N, 2, 2)."""
    return np.linalg.inv(np.linalg.cholesky(covariance))


@dataclass(frozen=True)
class _Corners:
    """The corners of all views in one table, `view` (M,) ascending; `d_shape` (M, 3, 3) is d board point / d shape."""

    view: Array
    board_m: Array
    d_shape: Array
    uv: Array
    whiten: Array

    def slices(self, count: int) -> list[slice]:
        """Rows of each view."""
        edges = np.searchsorted(self.view, np.arange(count + 1))
        return [slice(int(a), int(b)) for a, b in pairwise(edges)]


def _table(views: list[ViewPoints]) -> _Corners:
    board, uv = np.concatenate([v.board_m for v in views]), np.concatenate([v.uv for v in views])
    low, high = board[:, :2].min(0), board[:, :2].max(0)
    middle, half = (low + high) / 2.0, np.maximum((high - low) / 2.0, 1e-9)
    d_shape = np.zeros((len(board), 3, 3))
    d_shape[:, 1, 0] = board[:, 1] - middle[1]
    d_shape[:, 2, 1:] = ((board[:, :2] - middle) / half) ** 2 - 1.0
    view = np.repeat(np.arange(len(views)), [len(v.uv) for v in views])
    return _Corners(view, board, d_shape, uv, np.concatenate([v.whiten for v in views]))


def _camera_points(scene: Scene, corners: _Corners) -> tuple[Array, Array, Array]:
    """Points in the camera (M, 3), on the board in its shape (M, 3), and rotations (M, 3, 3)."""
    board = corners.board_m + corners.d_shape @ scene.shape
    R, t = scene.poses[corners.view, :3, :3], scene.poses[corners.view, :3, 3]
    return (R @ board[..., None])[..., 0] + t, board, R


def _residuals(scene: Scene, corners: _Corners) -> Array:
    """Seen minus predicted corners (M, 2) px."""
    return corners.uv - scene.lens.project(_camera_points(scene, corners)[0])


def _whitened(corners: _Corners, rows: Array) -> Array:
    """W times rows (M, 2) or (M, 2, K)."""
    return (corners.whiten @ rows[..., None])[..., 0] if rows.ndim == 2 else corners.whiten @ rows


def _linearised(scene: Scene, corners: _Corners, freedom: Freedom) -> tuple[Array, Array, Array]:
    """Whitened residuals (M, 2) and derivatives of the picture by shared terms (M, 2, S) and pose twist (M, 2, 6)."""
    points, board, R = _camera_points(scene, corners)
    uv, d_point, d_lens = scene.lens.project_with_jacobians(points)
    d_board = d_point @ R
    d_pose = np.concatenate([d_board, -d_board @ so3.hat(board)], axis=-1)
    d_shared = [d_lens[..., freedom.lens], (d_board @ corners.d_shape)[..., freedom.shape]]
    return (_whitened(corners, corners.uv - uv), _whitened(corners, np.concatenate(d_shared, axis=-1)),
            _whitened(corners, d_pose))  # fmt: skip


def _chi_square(scene: Scene, corners: _Corners, used: Array, freedom: Freedom) -> float:
    """Cost of the used corners and of the priors; infinite where one is not seen by the model."""
    prior = float(np.sum((scene.shape[freedom.shape] / freedom.shape_sigma[freedom.shape]) ** 2))
    total = prior + float(np.sum(_whitened(corners, _residuals(scene, corners))[used] ** 2))
    return total if np.isfinite(total) else np.inf


@dataclass(frozen=True)
class _Normal:
    """Normal equations in blocks: shared (S, S), cross (V, S, 6), pose (V, 6, 6); right sides; `own_right` (V, S)."""

    shared: Array
    cross: Array
    pose: Array
    shared_right: Array
    pose_right: Array
    own_right: Array


def _normal_equations(scene: Scene, corners: _Corners, used: Array, freedom: Freedom) -> _Normal:
    r, J_s, J_p = _linearised(scene, corners, freedom)
    r, J_s, J_p = (np.where(used.reshape(-1, *[1] * (a.ndim - 1)), a, 0.0) for a in (r, J_s, J_p))
    count, size = len(scene.poses), J_s.shape[-1]
    cross, pose = np.zeros((count, size, 6)), np.zeros((count, 6, 6))
    own_right, pose_right = np.zeros((count, size)), np.zeros((count, 6))
    for v, rows in enumerate(corners.slices(count)):
        flat = 2 * (rows.stop - rows.start)
        s, p, e = J_s[rows].reshape(flat, size), J_p[rows].reshape(flat, 6), r[rows].ravel()
        cross[v], pose[v], own_right[v], pose_right[v] = s.T @ p, p.T @ p, s.T @ e, p.T @ e
    flat_shared = J_s.reshape(2 * len(J_s), size)
    shared, shared_right = flat_shared.T @ flat_shared, own_right.sum(0)
    start = int(freedom.lens.sum())
    for k, j in enumerate(np.flatnonzero(freedom.shape)):
        shared[start + k, start + k] += freedom.shape_sigma[j] ** -2
        shared_right[start + k] -= scene.shape[j] * freedom.shape_sigma[j] ** -2
    return _Normal(shared, cross, pose, shared_right, pose_right, own_right)


def _damped(block: Array, damping: float) -> Array:
    diagonal = np.einsum("...ii->...i", block)
    return block + damping * diagonal[..., None] * np.eye(block.shape[-1])


def _solve(normal: _Normal, damping: float) -> tuple[Array, Array]:
    """Steps of the shared terms (S,) and of the poses (V, 6)."""
    pose_inverse = np.linalg.inv(_damped(normal.pose, damping))
    gain = normal.cross @ pose_inverse
    reduced = _damped(normal.shared, damping) - np.einsum("vij,vkj->ik", gain, normal.cross)
    right = normal.shared_right - np.einsum("vij,vj->i", gain, normal.pose_right)
    shared = np.linalg.solve(reduced, right) if len(right) else right
    pose_right = normal.pose_right - np.einsum("vij,i->vj", normal.cross, shared)
    return shared, np.einsum("vij,vj->vi", pose_inverse, pose_right)


def _moved(scene: Scene, freedom: Freedom, shared: Array, pose: Array) -> Scene:
    """The scene after steps of its free terms. Raises OptionError where the lens stops being one."""
    parameters, shape = scene.lens.parameters, scene.shape.copy()
    count = int(freedom.lens.sum())
    parameters[freedom.lens] += shared[:count]
    shape[freedom.shape] += shared[count:]
    return Scene(scene.lens.with_parameters(parameters), scene.poses @ se3.exp(pose), shape)


def _minimise(scene: Scene, corners: _Corners, used: Array, freedom: Freedom, tolerance: float) -> Scene:
    """Levenberg-Marquardt from `scene` over the used corners."""
    cost, damping = _chi_square(scene, corners, used, freedom), 1e-4
    for _ in range(_STEPS):
        normal = _normal_equations(scene, corners, used, freedom)
        trial, trial_cost = scene, np.inf
        while damping < 1e9:
            try:
                trial = _moved(scene, freedom, *_solve(normal, damping))
                trial_cost = _chi_square(trial, corners, used, freedom)
            except (OptionError, np.linalg.LinAlgError):
                trial_cost = np.inf
            if trial_cost <= cost:
                break
            damping *= 8.0
        if not trial_cost <= cost:
            break
        gain, scene, cost = cost - trial_cost, trial, trial_cost
        damping = max(damping / 8.0, 1e-12)
        if gain <= tolerance * cost + 1e-14:
            break
    return scene


def _within(scene: Scene, corners: _Corners) -> Array:
    """Which corners lie within `_GROSS` robust deviations of the fit."""
    sizes = np.linalg.norm(_whitened(corners, _residuals(scene, corners)), axis=-1)
    median = float(np.nanmedian(sizes))  # of a Rayleigh variable: 1.177 deviations
    with np.errstate(invalid="ignore"):
        return np.isfinite(sizes) & (sizes <= max(_GROSS * median / 1.177, 1e-9))


def _covariance(normal: _Normal) -> tuple[Array, float]:
    """Covariance (S + 6V square) and condition of the column-scaled Jacobian."""
    size, count = len(normal.shared_right), len(normal.pose)
    full = np.zeros((size + 6 * count, size + 6 * count))
    full[:size, :size] = normal.shared
    for v in range(count):
        at = slice(size + 6 * v, size + 6 * v + 6)
        full[:size, at], full[at, :size], full[at, at] = normal.cross[v], normal.cross[v].T, normal.pose[v]
    scale = 1.0 / np.sqrt(np.maximum(np.diag(full), 1e-300))
    scaled = full * scale[:, None] * scale
    eigenvalues = np.linalg.eigvalsh(scaled)
    condition = float(np.sqrt(eigenvalues[-1] / max(eigenvalues[0], 1e-300)))
    return np.linalg.pinv(scaled, rcond=1e-15, hermitian=True) * scale[:, None] * scale, condition


def _summary(scene: Scene, corners: _Corners, used: Array, freedom: Freedom) -> Solution:
    normal = _normal_equations(scene, corners, used, freedom)
    covariance, condition = _covariance(normal)
    gain = normal.cross @ np.linalg.inv(normal.pose)
    scores = normal.own_right - np.einsum("vij,vj->vi", gain, normal.pose_right)
    free = len(normal.shared_right) + 6 * len(scene.poses)
    known = 2 * int(used.sum()) + int(freedom.shape.sum())
    slices, error = corners.slices(len(scene.poses)), _residuals(scene, corners)
    return Solution(scene, freedom, [error[s] for s in slices], [used[s] for s in slices],
                    _chi_square(scene, corners, used, freedom), max(known - free, 1), covariance, condition,
                    scores)  # fmt: skip


def adjust(scene: Scene, views: list[ViewPoints], freedom: Freedom, tolerance: float = 1e-10) -> Solution:
    """Adjust lens, board shape and poses to the corners of all views, gross errors left out.

    Stops where a step lowers the cost by less than the share `tolerance`.
    """
    corners = _table(views)
    used = np.ones(len(corners.uv), bool)
    for _ in range(4):
        scene = _minimise(scene, corners, used, freedom, tolerance)
        found = _within(scene, corners)
        if np.array_equal(found, used):
            break
        used = found
    return _summary(scene, corners, used, freedom)


def approach(scene: Scene, views: list[ViewPoints], freedom: Freedom) -> Scene:
    """Bring a scene near its optimum, all corners counted: a stage on the way to `adjust`."""
    corners = _table(views)
    return _minimise(scene, corners, np.ones(len(corners.uv), bool), freedom, 1e-3)


def adjust_poses(scene: Scene, views: list[ViewPoints]) -> Solution:
    """Adjust the poses alone."""
    return adjust(scene, views, Freedom(np.zeros(len(scene.lens.names), bool)), 1e-6)


def with_noise_floor(views: list[ViewPoints], floor_px: float) -> list[ViewPoints]:
    """The same corners with `floor_px` added in quadrature to each axis's deviation."""
    out = []
    for points in views:
        W_inverse = np.linalg.inv(points.whiten)
        covariance = W_inverse @ np.swapaxes(W_inverse, -1, -2) + floor_px**2 * np.eye(2)
        out.append(replace(points, whiten=whitening(covariance)))
    return out
