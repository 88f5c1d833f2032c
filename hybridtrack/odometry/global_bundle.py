"""Bundle adjustment of the whole map, its variance factor and the joint covariance of its keyframes.

Up to a limit all keyframes are adjusted at once. Beyond it, windows of that size slide by half along the trajectory,
each held by the keyframes outside; errors longer than a window then stay as they are.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from hybridtrack.odometry.bundle import Bundle, adjust, pose_covariance
from hybridtrack.odometry.mapping import cull, take_back
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.sparse_map import BundleIndex, SparseMap, assemble

Array = np.ndarray

FEWEST_POINTS = 10


@dataclass(frozen=True, eq=False)
class Fit:
    """How well the keyframes `ids` (K,) of one frame of reference fit.

    `variance`: residual variance over the claimed one (1 where the tracks' covariances are right); `rays` and `points`
    used; `joint` (6K, 6K): covariance of the keyframes times `variance`, None where there are too many.
    """

    ids: list[int]
    variance: float
    rays: int
    points: int
    joint: Array | None


def _windows(ids: list[int], size: int) -> Iterator[list[int]]:
    if len(ids) <= size:
        yield ids
        return
    for start in range(0, len(ids) - size // 2, size // 2):
        yield ids[start : start + size]


def _bundle_of(world: SparseMap, free: list[int]) -> tuple[Bundle, BundleIndex] | None:
    """The bundle of some keyframes, held by all others that see their points, or else by the first of them."""
    points = np.unique(np.concatenate([world.keyframes[i].points for i in free]))
    points = points[points >= 0]
    if len(points) < FEWEST_POINTS:
        return None
    inside = set(free)
    outside = {k.id for k in world.keyframes if k.id not in inside and np.isin(k.points, points).any()}
    return assemble(world, sorted({*outside, *free}), points, outside or {free[0]})


def adjust_whole(world: SparseMap, options: OdometryOptions, rounds: int = 2) -> None:
    """Adjust all keyframes and points, and drop rays that do not fit, `rounds` times."""
    for ids in world.groups():
        for free in _windows(ids, options.max_bundle_keyframes):
            for _ in range(rounds):
                made = _bundle_of(world, free)
                if made is None:
                    break
                bundle, index = made
                adjusted = adjust(bundle, iterations=25, relative_decrease=1e-5)
                take_back(world, adjusted, index)
                cull(world, index, bundle.pose_of, bundle.point_of, adjusted.sigmas, options.inlier_sigma)


def residual_variance(sigmas: Array, freedom_share: float) -> float:
    """Variance of residuals (M,) over the claimed one, by their median: outliers do not count.

    The square of a sound residual is chi-square with two degrees of freedom, whose median is 2 ln 2. `freedom_share` is
    the share of the residuals' freedom that the unknowns left over.
    """
    return float(np.median(sigmas**2) / (2.0 * np.log(2.0)) / max(freedom_share, 0.05))


def fit_of(world: SparseMap, ids: list[int], options: OdometryOptions) -> Fit | None:
    """Judge the keyframes of one frame of reference after adjustment; None where they share too few points."""
    made = _bundle_of(world, ids)
    if made is None:
        return None
    bundle, _ = made
    adjusted = adjust(bundle, iterations=1)
    rays, points = len(adjusted.sigmas), len(bundle.points)
    unknowns = 6 * len(bundle.poses) + 3 * points
    variance = residual_variance(adjusted.sigmas, 1.0 - unknowns / max(2 * rays, unknowns + 1))
    joint = None
    if len(ids) <= options.max_bundle_keyframes:
        joint = variance * pose_covariance(bundle, adjusted)
    return Fit(ids, variance, rays, points, joint)
