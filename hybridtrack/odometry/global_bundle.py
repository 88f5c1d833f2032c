"""Bundle adjustment of the whole map, its variance factor and the joint covariance of its keyframes.

Up to a limit all keyframes are adjusted at once. Beyond it, windows of that size slide by half along the trajectory,
each held by the keyframes outside; errors longer than a window then stay as they are.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from hybridtrack.odometry.bundle import Bundle, adjust, pose_covariance, ray_residuals, residual_sigmas
from hybridtrack.odometry.mapping import cull, take_back
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.sparse_map import BundleIndex, SparseMap, assemble, ray_ids

Array = np.ndarray

FEWEST_POINTS = 10
FEWEST_PAIRS = 30
SMALLEST_FREEDOM = 0.05
LARGEST_SOUND_SIGMA = 2.5
LARGEST_CORRELATION = 0.95


@dataclass(frozen=True, eq=False)
class Fit:
    """How well the keyframes `ids` (K,) of one frame of reference fit.

    `variance`: residual variance of the tracks' rays over the claimed one (1 where their covariances are right);
    `repetition`: factor by which rays of one track count less than independent ones, from the correlation of
    consecutive residuals; `rays` and `points` used; `joint` (6K, 6K): covariance of the keyframes times both factors,
    None where there are too many.
    """

    ids: list[int]
    variance: float
    repetition: float
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
    return float(np.median(sigmas**2) / (2.0 * np.log(2.0)) / max(freedom_share, SMALLEST_FREEDOM))


def repetition(residuals: Array, point_of: Array) -> float:
    """How many rays of a track are worth one independent ray, at least 1.

    `residuals` (M, 2) are in order of point and time. For errors that decay by rho from one ray to the next the mean of
    many has (1 + rho) / (1 - rho) times the variance of independent ones (Priestley 1981, section 5.3). The fit makes
    residuals of n rays to a point correlate by about -1 / n.
    """
    next_to = point_of[1:] == point_of[:-1]
    sound = np.sum(residuals**2, axis=1) < LARGEST_SOUND_SIGMA**2
    pairs = next_to & sound[1:] & sound[:-1]
    if np.count_nonzero(pairs) < FEWEST_PAIRS:
        return 1.0
    product = float(np.mean(np.sum(residuals[1:][pairs] * residuals[:-1][pairs], axis=1)))
    power = 0.5 * float(np.mean(np.sum(residuals[1:][pairs] ** 2 + residuals[:-1][pairs] ** 2, axis=1)))
    rays_a_point = len(point_of) / len(np.unique(point_of))
    rho = product / max(power, 1e-300) + 1.0 / rays_a_point
    rho = min(max(rho, 0.0), LARGEST_CORRELATION)
    return (1.0 + rho) / (1.0 - rho)


def _freedom_share(bundle: Bundle) -> float:
    """Share of the residuals' freedom that poses and points leave over."""
    unknowns, numbers = 6 * len(bundle.poses) + 3 * len(bundle.points), 2 * len(bundle.pose_of)
    return 1.0 - unknowns / max(numbers, unknowns + 1)


def balance_places(world: SparseMap) -> None:
    """Scale the weights of place rays (their track ids are negative) so that they fit as well as the tracks' rays do.

    The two claim their deviations by different rules; which of them to believe more is for the residuals to say.
    """
    for ids in world.groups():
        made = _bundle_of(world, ids)
        if made is None:
            continue
        bundle, index = made
        sigmas = residual_sigmas(bundle, bundle.poses, bundle.points)
        places = ray_ids(world, bundle, index) < 0
        if np.count_nonzero(places) < FEWEST_PAIRS or np.all(places):
            continue
        share = np.sqrt(residual_variance(sigmas[~places], 1.0) / residual_variance(sigmas[places], 1.0))
        for keyframe_id in ids:
            view = world.keyframes[keyframe_id].view
            view.whitening[view.ids < 0] *= share


def fit_of(world: SparseMap, ids: list[int], options: OdometryOptions) -> Fit | None:
    """Judge the keyframes of one frame of reference after adjustment; None where they share too few points."""
    made = _bundle_of(world, ids)
    if made is None:
        return None
    bundle, index = made
    adjusted = adjust(bundle, iterations=1)
    tracks = ray_ids(world, bundle, index) >= 0
    variance = residual_variance(adjusted.sigmas[tracks], _freedom_share(bundle))
    residuals = ray_residuals(bundle, adjusted.poses, adjusted.points)
    repeated = repetition(residuals[tracks], bundle.point_of[tracks])
    joint = None
    if len(ids) <= options.max_bundle_keyframes:
        joint = variance * repeated * pose_covariance(bundle, adjusted)
    return Fit(ids, variance, repeated, len(adjusted.sigmas), len(bundle.points), joint)
