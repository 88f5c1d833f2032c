"""What pixels see: exact rays through the true lens, a pixel's aperture as a footprint on the texture.

A pixel averages light over its box of colour pixels and over the lens's point spread. Away from outlines the texture
is read at one point, blurred to the variance of the two together; along outlines a few rays spread over a box of that
variance. Rays and tiles are worked out once for a set of pixels, so that a module has one set for its event pixels
and one for its frames.
"""

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import Lens
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.synthesis.raycast_kernels import (
    ALONG_U,
    ALONG_V,
    CHANNEL,
    MAP_SIZE,
    MARGIN,
    RAY,
    RAY_SIZE,
    SOLID_ANGLE,
    cast_rays,
    list_candidates,
    render_exposures,
    render_instants,
    surface_maps,
)
from hybridtrack.synthesis.scene import Scene

Array = np.ndarray

# Motion on the colour array, in px, that a tile's list of surfaces allows for beyond the poses it was made at.
LIST_MARGIN_PX = 4.0
_TILE_PX, _GROUP_PX = (32, 16), 128
# Poses between two at which tiles are listed: at most half a pixel apart, they stay within the margin.
_LIST_STRIDE = 12
_MAPS_AT_ONCE = 200_000  # 22 MB


@dataclass(frozen=True)
class Aperture:
    """Light-collecting box of a pixel, `width_px` colour px a side, and the lens's point spread (one sigma, px)."""

    width_px: float = 1.0
    point_spread_px: float = 0.4

    @property
    def deviation_px(self) -> float:
        """Standard deviation along each axis of box and point spread together."""
        return math.sqrt(self.width_px**2 / 12.0 + self.point_spread_px**2)


@dataclass(frozen=True)
class PixelRays:
    """Rays of P pixels, sorted into tiles. Made by `pixel_rays`.

    `positions` (P, 2) and `directions` (P, 3), NaN beyond the lens's reach, in the caller's order. `rays`
    (R, RAY_SIZE), see the kernels, tile after tile; ray n is pixel `order[n]`'s, tile i starts at `start[i]`. Pixels
    `unreached` by the lens have no ray. `tiles`, `groups`: cone axes and sines.
    """

    positions: FloatArray
    directions: FloatArray
    rays: FloatArray
    order: Array
    start: Array
    tiles: tuple[FloatArray, FloatArray]
    groups: tuple[FloatArray, FloatArray]
    group_of_tile: Array
    unreached: Array

    @property
    def size(self) -> int:
        """Number of pixels."""
        return len(self.positions)


def _cones(rays: FloatArray, start: Array, margin_rad: float) -> tuple[FloatArray, FloatArray]:
    """Axes (tiles, 3) and sines of half angles (tiles,) of cones around each tile's rays."""
    axes, sines = np.empty((len(start) - 1, 3)), np.empty(len(start) - 1)
    for i, (begin, end) in enumerate(pairwise(start)):
        members = rays[begin:end, RAY : RAY + 3]
        axis = members.mean(axis=0)
        axes[i] = axis / np.linalg.norm(axis)
        widest = math.acos(min(1.0, float((members @ axes[i]).min())))
        sines[i] = math.sin(min(widest + margin_rad, 0.5 * math.pi))
    return axes, sines


def _starts(labels: Array) -> Array:
    """Where each run of equal labels starts, and the end."""
    return np.concatenate([[0], np.flatnonzero(np.diff(labels)) + 1, [len(labels)]]).astype(np.int64)


def _tile_order(positions: FloatArray, inside: Array) -> tuple[Array, Array, Array]:
    """Pixels `inside` sorted by group, tile and place; where tiles and where groups start among them."""
    column, row = (np.floor(positions[inside] / _TILE_PX).astype(np.int64) + 1).T
    stride = 1 << 20
    tile = row * stride + column
    group = (row * _TILE_PX[1] // _GROUP_PX) * stride + column * _TILE_PX[0] // _GROUP_PX
    sort = np.lexsort((inside, tile, group))
    return inside[sort], _starts(tile[sort]), _starts(group[sort])


def pixel_rays(lens: Lens, positions: FloatArray, aperture: Aperture, channels: Array | None = None) -> PixelRays:
    """Rays of pixels at colour-array `positions` (P, 2), the same `aperture` for all.

    `channels` (P,): index into `scene.CHANNELS` of each pixel's filter, None: all clear. Pixels that the lens does not
    reach see nothing but the background.
    """
    positions = np.ascontiguousarray(with_trailing_shape(positions, "positions", ("P", 2)))
    directions = lens.unproject(positions, allow_outside=True)
    steps = []
    for axis in (0, 1):
        half = 0.5 * np.eye(2)[axis]
        ahead, behind = (lens.unproject(positions + side * half, allow_outside=True) for side in (1.0, -1.0))
        steps.append(ahead - behind)
    px_area = np.linalg.norm(np.cross(steps[0], steps[1]), axis=-1)
    box_px = math.sqrt(12.0) * aperture.deviation_px
    rays = np.zeros((len(positions), RAY_SIZE))
    rays[:, RAY : RAY + 3] = directions
    rays[:, ALONG_U : ALONG_U + 3], rays[:, ALONG_V : ALONG_V + 3] = box_px * steps[0], box_px * steps[1]
    rays[:, SOLID_ANGLE] = 3.0 * aperture.deviation_px**2 * px_area
    rays[:, MARGIN] = 0.5 * box_px * np.maximum(*(np.linalg.norm(step, axis=-1) for step in steps))
    rays[:, CHANNEL] = 0 if channels is None else channels
    reached = np.isfinite(rays).all(axis=-1)
    inside = np.flatnonzero(reached)
    order, start, group_start = _tile_order(positions, inside)
    sorted_rays = rays[order]
    margin_rad = LIST_MARGIN_PX * float(np.sqrt(px_area[inside].max())) if len(inside) else 0.0
    return PixelRays(
        positions,
        directions,
        sorted_rays,
        order,
        start,
        _cones(sorted_rays, start, margin_rad),
        _cones(sorted_rays, group_start, margin_rad),
        np.searchsorted(group_start, start[:-1], side="right") - 1,
        np.flatnonzero(~reached),
    )


def maps_of(scene: Scene, world_from_camera: FloatArray) -> FloatArray:
    """Surface maps (T, Q, MAP_SIZE) of poses (T, 4, 4); see the kernels."""
    maps = np.empty((len(world_from_camera), scene.size, MAP_SIZE))
    surface_maps(scene.origins, scene.edges_u, scene.edges_v, scene.one_sided, scene.windows, world_from_camera, maps)
    return maps


class RayCaster:
    """Renders what one set of pixels sees of one scene."""

    def __init__(self, scene: Scene, rays: PixelRays) -> None:
        self.scene, self.rays = scene, rays
        self._packed = (scene.texels, scene.levels, scene.textures, scene.windows, scene.tints, scene.background)
        self._room = 32

    def _lists(self, maps: FloatArray) -> tuple[Array, Array]:
        rays = self.rays
        counts = np.zeros(len(rays.start) - 1, np.int64)
        while True:
            candidates = np.zeros((len(counts), self._room), np.int64)
            fits = list_candidates(maps, rays.group_of_tile, *rays.groups, *rays.tiles, candidates, counts)
            if fits:
                return candidates, counts
            self._room *= 2

    def instants(self, world_from_camera: FloatArray) -> Array:
        """Light (T, P) float32 of every pixel at poses (T, 4, 4) of one motion, at most half a colour px apart."""
        maps = maps_of(self.scene, world_from_camera)
        listed = np.unique(np.append(np.arange(0, len(maps), _LIST_STRIDE), len(maps) - 1))
        candidates, counts = self._lists(maps[listed])
        light = np.zeros((len(maps), self.rays.size), np.float32)
        light[:, self.rays.unreached] = self.scene.background
        tiles = (self.rays.order, self.rays.start)
        render_instants(maps, self._packed, tiles, candidates, counts, self.rays.rays, light)
        return light

    def exposures(self, exposure: "Exposure", way_stations: FloatArray) -> Array:
        """Light (P,) float32 of every pixel over an exposure of its own.

        `way_stations` (K, 4, 4): poses along all of the motion, no more than `LIST_MARGIN_PX` apart.
        """
        samples, count = exposure.world_from_camera.shape[:2]
        maps = maps_of(self.scene, exposure.world_from_camera.reshape(-1, 4, 4)).reshape(samples, count, -1, MAP_SIZE)
        candidates, counts = self._lists(maps_of(self.scene, way_stations))
        light = np.zeros(self.rays.size, np.float32)
        rows, weights = exposure.rows, exposure.weights
        light[self.rays.unreached] = weights.sum(axis=0)[rows[self.rays.unreached]] * self.scene.background
        tiles = (self.rays.order, self.rays.start)
        render_exposures(
            maps, weights, exposure.places, rows, self._packed, tiles, candidates, counts, self.rays.rays, light
        )
        return light


@dataclass(frozen=True)
class Exposure:
    """When the rows of a frame look, and how much each look counts.

    `world_from_camera` (samples, knots, 4, 4): poses of each sample of the exposure at a few instants of the readout;
    `places` (rows,) where between those knots each row is; `weights` (samples, rows) what each sample counts in each
    row; `rows` (P,) int64 each pixel's row.
    """

    world_from_camera: FloatArray
    places: FloatArray
    weights: FloatArray
    rows: Array


@dataclass(frozen=True)
class Hits:
    """Where rays (N,) meet a scene: surface index or -1, (s, t) on it (N, 2), distance in m (inf: nothing met)."""

    surface: Array
    place: FloatArray
    distance: FloatArray


def cast(scene: Scene, world_from_camera: FloatArray, directions: FloatArray, pose_of_ray: Array | None = None) -> Hits:
    """Meet rays of unit `directions` (N, 3), camera axes, from one pose (4, 4) or several (K, 4, 4).

    `pose_of_ray` (N,) names each ray's pose, in rising order; None: the one pose.
    """
    directions = np.ascontiguousarray(with_trailing_shape(directions, "directions", ("N", 3)))
    poses = with_trailing_shape(world_from_camera, "world_from_camera", (4, 4)).reshape(-1, 4, 4)
    count = len(directions)
    index = np.zeros(count, np.int64) if pose_of_ray is None else np.asarray(pose_of_ray, np.int64)
    if len(index) != count or np.any(np.diff(index) < 0):
        raise ShapeError(f"Expected `pose_of_ray` to name a pose for each of {count} rays in rising order.")
    hits = Hits(np.empty(count, np.int64), np.empty((count, 2)), np.empty(count))
    block = max(1, _MAPS_AT_ONCE // scene.size)
    for first in range(0, len(poses), block):
        rows = slice(*np.searchsorted(index, [first, first + block]))
        maps = maps_of(scene, poses[first : first + block])
        found = hits.surface[rows], hits.place[rows], hits.distance[rows]
        cast_rays(maps, index[rows] - first, directions[rows], *found)
    return hits
