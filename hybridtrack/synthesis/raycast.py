"""What pixels see: exact rays through the true lens, a pixel's aperture as a footprint on the texture.

A pixel averages light over its box of colour pixels and over the lens's point spread. Away from outlines the texture
is read at one point, blurred to the variance of the two together; along outlines a few rays spread over a box of that
variance. Rays and tiles are worked out once for a set of pixels, so that a module has one set for its event pixels
and one for its frames.
"""

import math
from dataclasses import dataclass

import numpy as np

from hybridtrack.geometry import Lens
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.synthesis.raycast_kernels import (
    MAP_SIZE,
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
_TILE_PX, _GROUP_PX = 32, 128
# Poses between two at which tiles are listed: at most half a pixel apart, they stay within the margin.
_LIST_STRIDE = 8


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

    `rays`: directions, steps that span the aperture along u and v (all (P, 3)), solid angle of the footprint and
    outline margin (both (P,)). `order`, `start`: pixels by tile; those `unreached` by the lens are in none.
    `tiles`, `groups`: cone axes and sines.
    """

    positions: FloatArray
    rays: tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]
    channels: Array
    order: Array
    start: Array
    tiles: tuple[FloatArray, FloatArray]
    groups: tuple[FloatArray, FloatArray]
    group_of_tile: Array
    unreached: Array

    @property
    def directions(self) -> FloatArray:
        """Unit directions (P, 3), NaN beyond the lens's reach."""
        return self.rays[0]

    @property
    def size(self) -> int:
        """Number of pixels."""
        return len(self.positions)


def _cones(directions: FloatArray, order: Array, start: Array, margin_rad: float) -> tuple[FloatArray, FloatArray]:
    """Axes (tiles, 3) and sines of half angles (tiles,) of cones around each tile's rays."""
    axes, sines = np.empty((len(start) - 1, 3)), np.empty(len(start) - 1)
    for i, (begin, end) in enumerate(zip(start[:-1], start[1:], strict=True)):
        members = directions[order[begin:end]]
        axis = members.mean(axis=0)
        axes[i] = axis / np.linalg.norm(axis)
        widest = math.acos(min(1.0, float((members @ axes[i]).min())))
        sines[i] = math.sin(min(widest + margin_rad, 0.5 * math.pi))
    return axes, sines


def _starts(labels: Array) -> Array:
    """Where each run of equal labels starts, and the end."""
    return np.concatenate([[0], np.flatnonzero(np.diff(labels)) + 1, [len(labels)]]).astype(np.int64)


def pixel_rays(lens: Lens, positions: FloatArray, aperture: Aperture, channels: Array | None = None) -> PixelRays:
    """Rays of pixels at colour-array `positions` (P, 2), the same `aperture` for all.

    `channels` (P,): index into `scene.CHANNELS` of each pixel's filter, None: all clear. Pixels that the lens does not
    reach see nothing but the background.
    """
    positions = np.ascontiguousarray(with_trailing_shape(positions, "positions", ("P", 2)).reshape(-1, 2))
    directions = lens.unproject(positions, allow_outside=True)
    steps = []
    for axis in (0, 1):
        half = 0.5 * np.eye(2)[axis]
        ahead, behind = (lens.unproject(positions + side * half, allow_outside=True) for side in (1.0, -1.0))
        steps.append(ahead - behind)
    px_area = np.linalg.norm(np.cross(steps[0], steps[1]), axis=-1)
    footprint_px = 2.0 * aperture.deviation_px  # a texel box of width b, read bilinearly, has the variance b^2 / 4
    box_px = math.sqrt(12.0) * aperture.deviation_px
    solid_angle = footprint_px**2 * px_area
    margin = 0.5 * box_px * np.maximum(*(np.linalg.norm(step, axis=-1) for step in steps))
    inside = np.flatnonzero(np.isfinite(directions).all(axis=-1) & np.isfinite(margin))
    column, row = (np.floor(positions[inside] / _TILE_PX).astype(np.int64) + 1).T
    ratio = _GROUP_PX // _TILE_PX
    stride = 1 << 20
    tile_label, group_label = row * stride + column, (row // ratio) * stride + column // ratio
    sort = np.lexsort((inside, tile_label, group_label))
    order, tile_label, group_label = inside[sort], tile_label[sort], group_label[sort]
    start, group_start = _starts(tile_label), _starts(group_label)
    margin_rad = LIST_MARGIN_PX * float(np.sqrt(px_area[inside].max())) if len(inside) else 0.0
    return PixelRays(
        positions,
        (directions, box_px * steps[0], box_px * steps[1], solid_angle, margin),
        np.zeros(len(positions), np.int64) if channels is None else np.asarray(channels, np.int64),
        order,
        start,
        _cones(directions, order, start, margin_rad),
        _cones(directions, order, group_start, margin_rad),
        np.searchsorted(group_start, start[:-1], side="right") - 1,
        np.setdiff1d(np.arange(len(positions)), inside),
    )


def maps_of(scene: Scene, world_from_camera: FloatArray) -> FloatArray:
    """Surface maps (T, Q, MAP_SIZE) of poses (T, 4, 4); see the kernels."""
    maps = np.empty((len(world_from_camera), scene.size, MAP_SIZE))
    surface_maps(
        scene.origins, scene.edges_u, scene.edges_v, scene.one_sided, scene.windows, world_from_camera, maps
    )
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
        render_instants(maps, self._packed, tiles, candidates, counts, self.rays.rays, self.rays.channels, light)
        return light

    def exposures(self, world_from_camera: FloatArray, weights: FloatArray, knots: FloatArray) -> Array:
        """Light (P,) float32 of every pixel over an exposure of its own.

        `world_from_camera` (samples, knots, 4, 4): poses of each sample of the exposure at a few instants of the
        readout, `weights` (samples, knots) its share, `knots` (P,) where between the knots each pixel is read.
        Samples are at most half a colour px of motion apart.
        """
        samples, count = world_from_camera.shape[:2]
        maps = maps_of(self.scene, world_from_camera.reshape(-1, 4, 4)).reshape(samples, count, -1, MAP_SIZE)
        listed = np.unique(np.append(np.arange(0, samples, _LIST_STRIDE), samples - 1))
        candidates, counts = self._lists(maps[listed].reshape(-1, *maps.shape[2:]))
        light = np.zeros(self.rays.size, np.float32)
        light[self.rays.unreached] = weights.sum(axis=0).mean() * self.scene.background
        tiles = (self.rays.order, self.rays.start)
        render_exposures(
            maps, weights, knots, self._packed, tiles, candidates, counts, self.rays.rays, self.rays.channels, light
        )
        return light


@dataclass(frozen=True)
class Hits:
    """Where rays (N,) meet a scene: surface index or -1, (s, t) on it (N, 2), distance in m (inf: nothing met)."""

    surface: Array
    place: FloatArray
    distance: FloatArray


def cast(scene: Scene, world_from_camera: FloatArray, directions: FloatArray) -> Hits:
    """Meet rays of unit `directions` (N, 3), camera axes, from one pose (4, 4) or a pose a ray (N, 4, 4)."""
    directions = np.ascontiguousarray(with_trailing_shape(directions, "directions", ("N", 3)))
    poses = with_trailing_shape(world_from_camera, "world_from_camera", (4, 4)).reshape(-1, 4, 4)
    count = len(directions)
    hits = Hits(np.empty(count, np.int64), np.empty((count, 2)), np.empty(count))
    block = max(1, 4_000_000 // (scene.size * MAP_SIZE))  # poses whose maps fit in a few tens of MB
    for begin in range(0, count, block) if len(poses) > 1 else [0]:
        rows = slice(begin, begin + block) if len(poses) > 1 else slice(None)
        index = np.arange(len(directions[rows])) if len(poses) > 1 else np.zeros(count, np.int64)
        maps = maps_of(scene, poses[rows] if len(poses) > 1 else poses)
        cast_rays(maps, index, directions[rows], hits.surface[rows], hits.place[rows], hits.distance[rows])
    return hits
