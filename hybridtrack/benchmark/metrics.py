"""How far an estimate is from the truth, and whether it knew.

Trajectories: alignment by Umeyama 1991; absolute trajectory error and relative pose error as defined by Sturm et al.
2012. Honesty: normalised estimation error squared (NEES), chi-square with as many degrees of freedom as the error has
numbers where the stated covariance is right (Bar-Shalom et al. 2001, section 5.4). Intervals by bootstrap (Efron 1979).
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from scipy.stats import chi2

from hybridtrack.errors import DegenerateDataError, OptionError, ShapeError
from hybridtrack.geometry import Lens, alignment, se3, sim3, so3
from hybridtrack.module import HybridModule

Array = np.ndarray
Alignment = Literal["similarity", "rigid", "none"]

FIELD = (5, 4)  # columns and rows of the field over which maps and lenses are compared
SURVIVES_WITHIN_PX = 5.0
SURVIVAL_STEP_NS = 10_000_000


def poses_at(t_ns: Array, world_from_camera: Array, at_ns: Array) -> Array:
    """Poses (M, 4, 4) at times (M,), along constant twists between samples (N,), (N, 4, 4); NaN outside their span."""
    if len(t_ns) < 2 or np.any(np.diff(t_ns) <= 0):
        raise ShapeError(f"Expected `t_ns` of at least 2 rising times, got {len(t_ns)} or one that does not rise.")
    left = np.clip(np.searchsorted(t_ns, at_ns, side="right") - 1, 0, len(t_ns) - 2)
    share = (at_ns - t_ns[left]) / (t_ns[left + 1] - t_ns[left])
    twist = se3.log(se3.inverse(world_from_camera[left]) @ world_from_camera[left + 1])
    poses = world_from_camera[left] @ se3.exp(share[:, None] * twist)
    poses[(share < 0.0) | (share > 1.0)] = np.nan
    return np.asarray(poses)


def align(estimate: Array, truth: Array, how: Alignment = "similarity") -> Array:
    """The similarity (4, 4) that takes estimated positions to true ones, both from poses (N, 4, 4).

    Raises DegenerateDataError for fewer than 3 poses, or positions on one line.
    """
    if how not in get_args(Alignment):
        raise OptionError(f"alignment: expected one of {', '.join(get_args(Alignment))}, got {how!r}")
    if how == "none":
        return np.eye(4)
    fit = alignment.similarity if how == "similarity" else alignment.rigid
    return np.asarray(fit(estimate[:, :3, 3], truth[:, :3, 3]))


def moved_poses(similarity: Array, poses: Array) -> Array:
    """Rigid poses (N, 4, 4) under a similarity (4, 4): positions moved and scaled, orientations turned."""
    scale, turn, shift = sim3.decompose(similarity)
    return se3.compose(turn @ poses[:, :3, :3], scale * (poses[:, :3, 3] @ turn.T) + shift)


@dataclass(frozen=True, eq=False)
class TrajectoryError:
    """Absolute trajectory error over N poses.

    `rms_m`, `median_m`, `max_m` of positions after alignment; `path_m` length of the true path and `percent` the root
    mean square as a share of it; `turn_rms_deg` of orientations; `errors` (N, 6) right perturbations from estimate to
    truth, translation in true metres; `similarity` (4, 4) that aligned them.
    """

    rms_m: float
    median_m: float
    max_m: float
    path_m: float
    percent: float
    turn_rms_deg: float
    errors: Array
    similarity: Array


def absolute_trajectory_error(estimate: Array, truth: Array, how: Alignment = "similarity") -> TrajectoryError:
    """Compare poses (N, 4, 4) with true ones at the same times (Sturm et al. 2012). Raises DegenerateDataError."""
    similarity = align(estimate, truth, how)
    moved = moved_poses(similarity, estimate)
    distance = np.linalg.norm(moved[:, :3, 3] - truth[:, :3, 3], axis=1)
    errors = se3.log(se3.inverse(moved) @ truth)
    path_m = float(np.linalg.norm(np.diff(truth[:, :3, 3], axis=0), axis=1).sum())
    rms_m = float(np.sqrt(np.mean(distance**2)))
    return TrajectoryError(
        rms_m,
        float(np.median(distance)),
        float(distance.max()),
        path_m,
        100.0 * rms_m / path_m if path_m > 0 else float("nan"),
        float(np.rad2deg(np.sqrt(np.mean(np.sum(errors[:, 3:] ** 2, axis=1))))),
        errors,
        similarity,
    )


@dataclass(frozen=True)
class RelativeError:
    """Relative pose error over `pairs` of poses: root mean square of shift and turn."""

    shift_rms_m: float
    turn_rms_deg: float
    pairs: int


def relative_pose_error(estimate: Array, truth: Array, step: int, scale: float = 1.0) -> RelativeError:
    """Error of the motion over `step` poses, estimated lengths times `scale` (Sturm et al. 2012).

    Poses (N, 4, 4) that are NaN are left out with their pairs. Raises DegenerateDataError where no pair is left.
    """
    if step < 1:
        raise OptionError(f"step: expected at least 1, got {step}")
    moved = moved_poses(sim3.compose(scale, np.eye(3), np.zeros(3)), estimate)
    motion = se3.inverse(moved[:-step]) @ moved[step:]
    wanted = se3.inverse(truth[:-step]) @ truth[step:]
    errors = se3.inverse(wanted) @ motion
    errors = errors[np.isfinite(errors).all(axis=(1, 2))]
    if not len(errors):
        raise DegenerateDataError(f"relative pose error: expected a pair of poses {step} apart, got none")
    twist = se3.log(errors)
    return RelativeError(
        float(np.sqrt(np.mean(np.sum(errors[:, :3, 3] ** 2, axis=1)))),
        float(np.rad2deg(np.sqrt(np.mean(np.sum(twist[:, 3:] ** 2, axis=1))))),
        len(errors),
    )


def nees(errors: Array, covariances: Array) -> Array:
    """Normalised estimation error squared (N,) of errors (N, d) under covariances (N, d, d)."""
    errors, covariances = np.asarray(errors, float), np.asarray(covariances, float)
    wanted = (*errors.shape, errors.shape[-1])
    if covariances.shape != wanted:
        raise ShapeError(f"Expected `covariances` of shape {wanted}, got {covariances.shape}.")
    return np.einsum("ni,ni->n", errors, np.linalg.solve(covariances, errors[..., None])[..., 0])


@dataclass(frozen=True)
class Honesty:
    """`mean_ratio`: mean NEES over degrees of freedom, 1 where covariances are right; `coverage`: share of errors
    inside the 95 % region, 0.95 where they are."""

    mean_ratio: float
    coverage: float
    count: int


def honesty(values: Array, freedom: int) -> Honesty:
    """Judge NEES values (N,) of errors with `freedom` numbers each. Raises DegenerateDataError without values."""
    values = np.asarray(values, float)
    if not len(values):
        raise DegenerateDataError("honesty: expected at least one NEES value, got none")
    inside = values <= chi2.ppf(0.95, freedom)
    return Honesty(float(values.mean() / freedom), float(inside.mean()), len(values))


def field_positions(width: int, height: int, margin: float = 0.05) -> Array:
    """Positions (20, 2) in px of a 5x4 field over an array, a share `margin` of its size inside the edge."""
    columns = np.linspace(margin, 1.0 - margin, FIELD[0]) * (width - 1)
    rows = np.linspace(margin, 1.0 - margin, FIELD[1]) * (height - 1)
    return np.stack(np.meshgrid(columns, rows), axis=-1).reshape(-1, 2)


def map_displacement(estimate: HybridModule, truth: HybridModule) -> Array:
    """Displacement (20, 2) in colour px of the event-to-colour map, estimate less truth, over a 5x4 field of the
    grid."""
    field = field_positions(truth.event_grid.width, truth.event_grid.height, margin=0.0)
    return np.asarray(estimate.colour_from_event_px(field) - truth.colour_from_event_px(field))


def lens_displacement(estimate: Lens, truth: Lens, width: int, height: int) -> Array:
    """Displacement (20, 2) in colour px between two lenses over a 5x4 field, orientation removed.

    A turn of the camera and a shift of the principal point look alike; what the estimated lens sees is turned as a
    whole so that its rays fit the true ones best, and projected by the estimate.
    """
    uv = field_positions(width, height)
    rays_true, rays = truth.unproject(uv), estimate.unproject(uv)
    turn = so3.project_to_rotation(rays.T @ rays_true)
    for _ in range(10):  # from rays to pixels: the turn that is best in the picture
        seen, by_point, _ = estimate.project_with_jacobians(rays_true @ turn.T)
        by_turn = -by_point @ so3.hat(rays_true @ turn.T)
        step, *_ = np.linalg.lstsq(by_turn.reshape(-1, 3), (uv - seen).ravel(), rcond=None)
        turn = so3.exp(step) @ turn
    return np.asarray(estimate.project(rays_true @ turn.T) - uv)


@dataclass(frozen=True)
class Survival:
    """Share of seeds that survive: `survived` of the `seeds` that truth says stay visible."""

    survived: int
    seeds: int

    @property
    def share(self) -> float:
        """Survived over seeds; NaN where truth keeps none visible."""
        return self.survived / self.seeds if self.seeds else float("nan")


@dataclass(frozen=True, eq=False)
class TruePaths:
    """Where S seeds truly are: `ids` (S,), at T `t_ns` 10 ms apart, `uv` (T, S, 2) colour px, `visible` (T, S) bool."""

    ids: Array
    t_ns: Array
    uv: Array
    visible: Array


def seed_survives(t_ns: Array, uv: Array, lost: Array, at_ns: Array, true_uv: Array) -> bool:
    """Whether one track (N,), (N, 2), never `lost` (N,), lies within 5 px of truth (T, 2) at every instant (T,).

    Positions between samples are interpolated; before the first and after the last sample there is no track.
    """
    if not len(t_ns) or np.any(lost):
        return False
    span_ns = SURVIVAL_STEP_NS // 2
    if t_ns[0] > at_ns[0] + span_ns or t_ns[-1] < at_ns[-1] - span_ns:
        return False
    seconds, at_s = (t_ns - t_ns[0]) * 1e-9, (at_ns - t_ns[0]) * 1e-9
    here = np.stack([np.interp(at_s, seconds, uv[:, axis]) for axis in (0, 1)], axis=1)
    return bool(np.all(np.linalg.norm(here - true_uv, axis=1) <= SURVIVES_WITHIN_PX))


def survival(ids: Array, t_ns: Array, uv: Array, lost: Array, truth: TruePaths) -> Survival:
    """Score tracks (N,) by id against the seeds that stay visible at all instants of `truth`; sorted by time."""
    stay = np.flatnonzero(truth.visible.all(axis=0))
    survived = 0
    for seed in stay:
        own = ids == truth.ids[seed]
        survived += seed_survives(t_ns[own], uv[own], lost[own], truth.t_ns, truth.uv[:, seed])
    return Survival(survived, len(stay))


@dataclass(frozen=True)
class Interval:
    """An estimate and the interval (2.5 to 97.5 %) that resampling gives it."""

    value: float
    low: float
    high: float


def bootstrap(
    values: Array, statistic: Callable[[Array], float] = lambda v: float(np.mean(v)), rounds: int = 1000, seed: int = 0
) -> Interval:
    """Percentile interval of a statistic by resampling values (N, ...) over their first axis (Efron 1979).

    Raises DegenerateDataError for fewer than 2 values.
    """
    values = np.asarray(values)
    if len(values) < 2:
        raise DegenerateDataError(f"bootstrap: expected at least 2 values, got {len(values)}")
    rng = np.random.default_rng(seed)
    draws = [statistic(values[rng.integers(0, len(values), len(values))]) for _ in range(rounds)]
    low, high = np.percentile(draws, [2.5, 97.5])
    return Interval(float(statistic(values)), float(low), float(high))
