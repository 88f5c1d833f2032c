"""Ray casting: against Open3D, against closed forms, and against itself without lists."""

import numpy as np
import pytest

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import FisheyeLens, PerspectiveLens, se3, so3
from hybridtrack.synthesis.raycast import Aperture, Exposure, RayCaster, cast, maps_of, pixel_rays
from hybridtrack.synthesis.raycast_kernels import render_exposures, render_instants
from hybridtrack.synthesis.scene import Scene, SceneBuilder, Surface, flat_panel
from tests.synthesis.panels import DISTANCE_M, FOCAL_PX, lens_of, seeing_module, sine_panel, step_panel

LENS = PerspectiveLens(FOCAL_PX, FOCAL_PX, 79.5, 47.5, (-0.1, 0.02, 0.0), (5e-4, -3e-4))


def pixel_grid(width: int, height: int) -> np.ndarray:
    """Positions (P, 2) of all colour pixels."""
    u, v = np.meshgrid(np.arange(width), np.arange(height))
    return np.stack([u, v], axis=-1).reshape(-1, 2).astype(float)


def clutter(seed: int, count: int = 60) -> Scene:
    """Parallelograms in all attitudes before a wall, camera axes as world axes."""
    random = np.random.default_rng(seed)
    builder = SceneBuilder(background=0.07)
    textures = [builder.texture(random.uniform(0.05, 0.9, (40, 50))) for _ in range(4)]
    builder.add(Surface((-6, -6, 5.0), (12, 0, 0.5), (0, 12, 0), textures[0]))
    for k in range(count):
        corner = random.uniform([-1.5, -1.0, 1.0], [1.5, 1.0, 4.0])
        edges = random.normal(0.0, 0.3, (2, 3))
        look = {"texture": textures[k % 4], "one_sided": bool(random.integers(2))}
        builder.add(Surface(tuple(corner), tuple(edges[0]), tuple(edges[1]), **look))
    return builder.build()


def nearby_poses(count: int, step: float) -> np.ndarray:
    """Poses (count, 4, 4) along a short way."""
    twist = np.array([1.0, 0.4, 0.5, 0.1, -0.3, 0.2]) * step
    return se3.exp(np.arange(count)[:, None] * twist)


@pytest.mark.outside
def test_agrees_with_open3d() -> None:
    """Rays meet the same surface at the same distance as Open3D's ray casting scene finds (two-sided clutter)."""
    open3d = pytest.importorskip("open3d")
    scene = clutter(3)
    scene = Scene(**{**scene.__dict__, "one_sided": np.zeros(scene.size, bool)})
    pose = se3.exp(np.array([0.1, -0.05, 0.2, 0.05, 0.1, -0.3]))
    directions = LENS.unproject(np.random.default_rng(0).uniform([0, 0], [159, 95], (4000, 2)))
    hits = cast(scene, pose, directions)
    corners, triangles = scene.triangles()
    other = open3d.t.geometry.RaycastingScene()
    other.add_triangles(corners.astype(np.float32), triangles.astype(np.uint32))
    rays = np.concatenate([np.broadcast_to(pose[:3, 3], directions.shape), directions @ pose[:3, :3].T], axis=1)
    answer = other.cast_rays(open3d.core.Tensor(rays.astype(np.float32)))
    distance, triangle = answer["t_hit"].numpy(), answer["primitive_ids"].numpy()
    same = np.where(np.isfinite(distance), triangle // 2, -1) == hits.surface
    # Single precision on their side decides a few rays along outlines and crossings the other way.
    assert same.mean() > 0.998
    met = same & (hits.surface >= 0)
    np.testing.assert_allclose(distance[met], hits.distance[met], rtol=2e-5)


def test_agrees_with_the_homography_of_a_plane() -> None:
    """Places on a tilted panel follow the closed-form homography of a plane to 1e-9 of its side."""
    scene = flat_panel(np.full((4, 4), 0.5), 3.0, 2.0)
    pose = se3.compose(so3.exp(np.array([0.2, -0.3, 0.1])), [0.2, -0.1, -1.7])
    lens = PerspectiveLens(FOCAL_PX, FOCAL_PX, 79.5, 47.5)
    uv = pixel_grid(160, 96)[::7]
    R, t = pose[:3, :3].T, -pose[:3, :3].T @ pose[:3, 3]
    K = np.array([[FOCAL_PX, 0, 79.5], [0, FOCAL_PX, 47.5], [0, 0, 1.0]])
    H = K @ np.column_stack([R[:, 0], R[:, 1], t])
    plane = np.linalg.solve(H, np.column_stack([uv, np.ones(len(uv))]).T)
    xy = (plane[:2] / plane[2]).T
    hits = cast(scene, pose, lens.unproject(uv))
    inside = np.all(np.abs(xy) < [1.5, 1.0], axis=1)
    assert np.array_equal(hits.surface >= 0, inside)
    np.testing.assert_allclose(hits.place[inside], xy[inside] / [3.0, 2.0] + 0.5, atol=1e-9)


@pytest.mark.parametrize("lens", [LENS, FisheyeLens(60.0, 60.0, 79.5, 47.5, (0.01, -0.002, 0.0, 0.0))])
def test_light_is_the_texture_at_the_place_met(lens: PerspectiveLens | FisheyeLens) -> None:
    """On a texture that is a ramp, light is the ramp at the place that the exact ray meets, at any blur."""
    ramp = np.tile((np.arange(400) + 0.5) / 400, (400, 1))
    scene = flat_panel(0.1 + 0.8 * ramp, 20.0, 20.0)
    pose = se3.compose(so3.exp(np.array([0.1, 0.2, 0.0])), [0.0, 0.0, -2.0])
    uv = pixel_grid(160, 96)
    rays = pixel_rays(lens, uv, Aperture())
    light = RayCaster(scene, rays).instants(pose[None])[0]
    hits = cast(scene, pose, rays.directions)
    inside = (hits.surface >= 0) & np.all(np.abs(hits.place - 0.5) < 0.45, axis=1)
    assert inside.sum() > 1000
    np.testing.assert_allclose(light[inside], 0.1 + 0.8 * hits.place[inside, 0], atol=3e-5)


def test_a_known_shift_of_the_picture_is_kept() -> None:
    """Sliding by 0.3 px moves the phase of a sine by 0.3 px, to 0.002 px."""
    module, period = seeing_module(), 20.0
    caster = RayCaster(sine_panel(period), pixel_rays(lens_of(module), pixel_grid(160, 96), Aperture()))
    poses = np.repeat(np.eye(4)[None], 2, axis=0)
    poses[:, 2, 3] = -DISTANCE_M
    poses[1, 0, 3] = -0.3 * DISTANCE_M / FOCAL_PX
    light = caster.instants(poses).reshape(2, 96, 160)[:, 40, :140]
    spectrum = (light * np.exp(-2j * np.pi * np.arange(140) / period)).sum(axis=1)
    shift = -np.angle(spectrum[1] / spectrum[0]) * period / (2 * np.pi)
    assert shift == pytest.approx(0.3, abs=2e-3)


@pytest.mark.parametrize("width_px", [1.0, 2.0])
def test_blur_of_a_pixel_has_the_variance_of_box_and_point_spread(width_px: float) -> None:
    """A sine is damped by exp(-2 (pi sigma / period)^2), sigma^2 from box and point spread, to 3 % of sigma^2, however
    fine the texels are and however they lie under the pixels."""
    module, period = seeing_module(), 12.0
    aperture = Aperture(width_px, 0.6)
    for texels_a_px in (2.0, 3.3, 8.0):
        scene = sine_panel(period, texels_a_px)
        caster = RayCaster(scene, pixel_rays(lens_of(module), pixel_grid(160, 96), aperture))
        for shift in (0.0, 0.25):
            pose = np.eye(4)
            pose[0, 3], pose[2, 3] = shift * DISTANCE_M / FOCAL_PX, -DISTANCE_M
            line = caster.instants(pose[None])[0].reshape(96, 160)[40, :156]
            amplitude = 2 * abs((line * np.exp(-2j * np.pi * np.arange(156) / period)).mean())
            variance = -np.log(amplitude / 0.3) / 2 * (period / np.pi) ** 2
            # The sine was drawn at texel centres; the variance of a finest texel's own box is not in the picture.
            expected = width_px**2 / 12 + 0.36 - 1 / (12 * texels_a_px**2)
            assert variance == pytest.approx(expected, rel=0.02)


def test_outlines_are_smoothed() -> None:
    """A panel's border passing through a pixel is seen in a few levels whose mean follows the share covered."""
    builder = SceneBuilder(background=0.0)
    builder.add(Surface((0.0, -5.0, 0.0), (5.0, 0, 0), (0, 10.0, 0), builder.texture(np.ones((4, 4)))))
    rays = pixel_rays(lens_of(seeing_module()), np.array([[79.5, 47.5]]), Aperture(1.0, 0.0))
    caster = RayCaster(builder.build(), rays)
    offsets = np.linspace(-1.0, 1.0, 81)
    poses = np.repeat(np.eye(4)[None], len(offsets), axis=0)
    poses[:, 0, 3], poses[:, 2, 3] = offsets * DISTANCE_M / FOCAL_PX, -DISTANCE_M
    light = caster.instants(poses)[:, 0]
    exact = np.clip(offsets + 0.5, 0.0, 1.0)
    assert np.abs(light - exact).max() <= 0.13
    assert np.abs(light - exact).mean() < 0.04


def test_fine_texture_far_away_does_not_alias() -> None:
    """A checker far finer than a pixel looks evenly grey."""
    checker = np.indices((512, 512)).sum(axis=0) % 2 * 0.8 + 0.1
    scene = flat_panel(checker, 4.0, 4.0)
    pose = np.eye(4)
    pose[2, 3] = -20.0
    rays = pixel_rays(LENS, pixel_grid(160, 96), Aperture())
    light = RayCaster(scene, rays).instants(pose[None])[0]
    met = cast(scene, pose, rays.directions)
    well_inside = (met.surface >= 0) & np.all(np.abs(met.place - 0.5) < 0.4, axis=1)
    assert well_inside.sum() > 200
    np.testing.assert_allclose(light[well_inside], 0.5, atol=2e-3)


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_lists_lose_nothing(seed: int) -> None:
    """Rendering with lists of surfaces a tile gives exactly what rendering with all surfaces gives."""
    scene = clutter(seed)
    caster = RayCaster(scene, pixel_rays(LENS, pixel_grid(160, 96), Aperture()))
    poses = nearby_poses(20, 2.5e-3)
    light = caster.instants(poses)
    tiles = len(caster.rays.start) - 1
    everything = np.tile(np.arange(scene.size), (tiles, 1))
    maps = maps_of(scene, poses)
    counts = np.full(tiles, scene.size)
    whole = np.zeros_like(light)
    order = (caster.rays.order, caster.rays.start)
    render_instants(maps, caster._packed, order, everything, counts, caster.rays.rays, whole)
    assert np.array_equal(light, whole)


def test_lists_of_an_exposure_lose_nothing() -> None:
    """The same for exposures of a rolling shutter."""
    scene = clutter(5)
    caster = RayCaster(scene, pixel_rays(LENS, pixel_grid(160, 96), Aperture()))
    poses = nearby_poses(12, 2.5e-3).reshape(3, 4, 4, 4)
    rows, weights, places = np.repeat(np.arange(96), 160), np.full((3, 96), 1 / 3), np.arange(96) / 95 * 3
    light = caster.exposures(Exposure(poses, places, weights, rows), nearby_poses(12, 2.5e-3)[::3])
    tiles = len(caster.rays.start) - 1
    whole = np.zeros_like(light)
    maps = maps_of(scene, poses.reshape(-1, 4, 4)).reshape(3, 4, scene.size, -1)
    everything, counts = np.tile(np.arange(scene.size), (tiles, 1)), np.full(tiles, scene.size)
    order = (caster.rays.order, caster.rays.start)
    render_exposures(maps, weights, places, rows, caster._packed, order, everything, counts, caster.rays.rays, whole)
    assert np.array_equal(light, whole)


def test_exposure_at_rest_is_the_instant() -> None:
    """Without motion an exposure shows what an instant shows."""
    caster = RayCaster(clutter(6), pixel_rays(LENS, pixel_grid(160, 96), Aperture()))
    poses = np.tile(np.eye(4), (2, 3, 1, 1))
    rows = np.repeat(np.arange(96), 160)
    light = caster.exposures(Exposure(poses, np.arange(96) / 95 * 2, np.full((2, 96), 0.5), rows), poses[0])
    np.testing.assert_allclose(light, caster.instants(np.eye(4)[None])[0], atol=1e-6)


def test_pixels_beyond_the_lens_see_the_background() -> None:
    """Where the lens has no ray a pixel shows the background, and the rest is unharmed."""
    lens = PerspectiveLens(40.0, 40.0, 79.5, 47.5, (-0.3, 0.0, 0.0))
    rays = pixel_rays(lens, pixel_grid(160, 96), Aperture())
    unreached = ~np.isfinite(rays.directions).all(axis=1)
    assert 0 < unreached.sum() < rays.size
    light = RayCaster(clutter(7), rays).instants(np.eye(4)[None])[0]
    np.testing.assert_allclose(light[unreached], 0.07)
    assert np.all(light[~unreached] > 0)


def test_mosaic_channels_take_their_tint() -> None:
    """A pixel under a filter sees the surface's tint for that filter."""
    builder = SceneBuilder()
    texture = builder.texture(np.full((4, 4), 0.5))
    builder.add(Surface((-9, -9, 3), (18, 0, 0), (0, 18, 0), texture, tint=(1.0, 0.2, 0.4, 0.6)))
    rays = pixel_rays(LENS, np.full((4, 2), 40.0), Aperture(), np.arange(4))
    light = RayCaster(builder.build(), rays).instants(np.eye(4)[None])[0]
    np.testing.assert_allclose(light, [0.5, 0.1, 0.2, 0.3], rtol=1e-4)


def test_step_edge_lies_where_geometry_puts_it() -> None:
    """The half-way point of an edge is at its true place to 0.003 px, whatever part of a pixel that is."""
    places = np.stack([np.arange(0.0, 160.0, 0.1), np.full(1600, 40.0)], axis=1)
    caster = RayCaster(step_panel(), pixel_rays(lens_of(seeing_module()), places, Aperture()))
    for shift in (0.0, 0.21, 0.48, 0.77):
        pose = np.eye(4)
        pose[0, 3], pose[2, 3] = -shift * DISTANCE_M / FOCAL_PX, -DISTANCE_M
        line = caster.instants(pose[None])[0].astype(float)
        # What is missing to the bright level, summed, is the way from the left border to the edge.
        assert 0.1 * ((0.8 - line) / 0.6).sum() - 0.05 == pytest.approx(79.5 + shift, abs=3e-3)


def test_cast_refuses_poses_out_of_order() -> None:
    """Rays must name their poses in rising order, one each."""
    with pytest.raises(ShapeError, match="rising order"):
        cast(clutter(0), np.tile(np.eye(4), (2, 1, 1)), np.tile([0, 0, 1.0], (2, 1)), np.array([1, 0]))
