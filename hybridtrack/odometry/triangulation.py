"""Points from rays of several poses.

Linear start: the point nearest to all rays, sum over rays of |(I - b b')(X - c)|^2, then Gauss-Newton on the whitened
residuals. A point is accepted only where its rays meet at a sufficient angle, it lies ahead of every camera, and every
residual is small: the three ways in which a wrong track shows.
"""

from dataclasses import dataclass

import numpy as np

Array = np.ndarray

ITERATIONS = 6


@dataclass(frozen=True, eq=False)
class Sightings:
    """M rays to G points, sorted by point: `group` (M,) point of each ray; `centres` (M, 3) and `turns` (M, 3, 3)
    world_from_camera at each ray's own time; `rays` (M, 3) camera axes; `whitening` (M, 2, 3)."""

    group: Array
    centres: Array
    turns: Array
    rays: Array
    whitening: Array

    @property
    def count(self) -> int:
        """Number of points."""
        return int(self.group[-1]) + 1 if len(self.group) else 0


@dataclass(frozen=True, eq=False)
class Triangulated:
    """G points: `positions` (G, 3), `accepted` (G,) bool, largest angle between rays `parallax_rad` (G,) and worst
    residual `worst_sigma` (G,)."""

    positions: Array
    accepted: Array
    parallax_rad: Array
    worst_sigma: Array


def _summed(values: Array, group: Array, count: int) -> Array:
    total = np.zeros((count, *values.shape[1:]))
    np.add.at(total, group, values)
    return total


def _solved(matrices: Array, vectors: Array) -> Array:
    """Solutions (G, 3); NaN where a matrix (G, 3, 3) is singular to rounding."""
    scale = np.maximum(np.trace(matrices, axis1=1, axis2=2), 1e-300)
    scaled = matrices / scale[:, None, None]
    good = np.linalg.eigvalsh(scaled)[:, 0] > 1e-12
    result = np.full(vectors.shape, np.nan)
    result[good] = np.linalg.solve(scaled[good], (vectors / scale[:, None])[good][..., None])[..., 0]
    return result


def nearest_to_rays(seen: Sightings) -> Array:
    """The points (G, 3) nearest to all their rays; NaN where the rays are parallel."""
    world_rays = (seen.turns @ seen.rays[..., None])[..., 0]
    across = np.eye(3) - world_rays[:, :, None] * world_rays[:, None, :]
    matrices = _summed(across, seen.group, seen.count)
    vectors = _summed((across @ seen.centres[..., None])[..., 0], seen.group, seen.count)
    return _solved(matrices, vectors)


def point_residuals(seen: Sightings, positions: Array) -> tuple[Array, Array, Array]:
    """Whitened residuals (M, 2), Jacobians (M, 2, 3) by the point, and whether each point is ahead (M,)."""
    p = (np.swapaxes(seen.turns, 1, 2) @ (positions[seen.group] - seen.centres)[..., None])[..., 0]
    distance = np.maximum(np.linalg.norm(p, axis=1, keepdims=True), 1e-12)
    n = p / distance
    across = (np.eye(3) - n[:, :, None] * n[:, None, :]) / distance[..., None]
    jacobian = seen.whitening @ across @ np.swapaxes(seen.turns, 1, 2)
    ahead = np.einsum("ij,ij->i", n, seen.rays) > 0.0
    return (seen.whitening @ n[..., None])[..., 0], jacobian, ahead


def _largest_angle(seen: Sightings, positions: Array) -> Array:
    """Largest angle (G,) of a point's rays to its first and to its last.

    Exact for two rays and for motion that does not turn back, never too large, at worst half the largest.
    """
    direction = positions[seen.group] - seen.centres
    direction = direction / np.maximum(np.linalg.norm(direction, axis=1, keepdims=True), 1e-12)
    angle = np.zeros(seen.count)
    for end in (
        np.searchsorted(seen.group, seen.group, side="left"),
        np.searchsorted(seen.group, seen.group, side="right") - 1,
    ):
        sine = np.linalg.norm(np.cross(direction, direction[end]), axis=1)
        cosine = np.einsum("ij,ij->i", direction, direction[end])
        np.maximum.at(angle, seen.group, np.arctan2(sine, cosine))
    return angle


def triangulate(seen: Sightings, min_parallax_rad: float, max_sigma: float) -> Triangulated:
    """Triangulate every group of rays and judge the result; see the module docstring."""
    positions = nearest_to_rays(seen)
    rays_of = np.bincount(seen.group, minlength=seen.count)
    for _ in range(ITERATIONS):
        r, J, _ = point_residuals(seen, np.nan_to_num(positions))
        matrices = _summed(np.swapaxes(J, 1, 2) @ J, seen.group, seen.count)
        vectors = _summed((np.swapaxes(J, 1, 2) @ r[..., None])[..., 0], seen.group, seen.count)
        step = _solved(matrices, vectors)
        positions = positions - np.where(np.isfinite(step), step, 0.0)
    r, _, ahead = point_residuals(seen, np.nan_to_num(positions))
    worst = np.zeros(seen.count)
    np.maximum.at(worst, seen.group, np.where(ahead, np.linalg.norm(r, axis=1), np.inf))
    parallax = _largest_angle(seen, np.nan_to_num(positions))
    accepted = np.isfinite(positions).all(axis=1) & (rays_of >= 2)
    accepted &= (parallax >= min_parallax_rad) & (worst <= max_sigma)
    return Triangulated(positions, accepted, parallax, worst)
