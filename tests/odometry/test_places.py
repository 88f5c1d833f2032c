"""Descriptors of real pictures: known again from elsewhere, placed where they are, told from other places."""

from collections.abc import Callable

import cv2
import numpy as np
import pytest
from skimage import data

from hybridtrack.geometry import se3
from hybridtrack.module import Cluster, ColourArray, EventGrid, FrameMode, HybridModule, PerspectiveParameters, Timing
from hybridtrack.odometry.observations import FrameTimes, view_of
from hybridtrack.odometry.pictures import grey_picture, point_colours
from hybridtrack.odometry.places import Place, PlaceBook, describe, matches, picture_flow
from hybridtrack.odometry.sparse_map import SparseMap

Array = np.ndarray
TIMES = FrameTimes(np.array([0]), 239.5, 10e-6)


def module(**mode: object) -> HybridModule:
    """A module of 640x480 colour px whose frames are binned by two."""
    return HybridModule(
        colour_array=ColourArray(width=640, height=480),
        cluster=Cluster(width=4, height=4, clear_site=(2, 2)),
        event_grid=EventGrid(width=160, height=120),
        frame_mode=FrameMode(width=320, height=240, binning=2, **mode),  # type: ignore[arg-type]
        lens=PerspectiveParameters(fx=500.0, fy=500.0, cx=319.5, cy=239.5),
        timing=Timing(frame_offset_ns=0.0, line_time_ns=20_000.0),
    )


def empty_view(lens_module: HybridModule) -> object:
    none = np.empty((0, 2))
    table = {
        "ids": np.empty(0, int),
        "uv": none,
        "uv_at_frame": none,
        "dt_s": np.empty(0),
        "covariance": np.empty((0, 3)),
    }
    return view_of(0, 0, table, lens_module.lens_model(), 0.1)


def picture(shift: float = 0.0, turn_deg: float = 0.0, name: str = "gravel") -> Array:
    """A 240x320 part of a photograph, moved by `shift` px to the right and turned about its middle."""
    source = getattr(data, name)()
    M = cv2.getRotationMatrix2D((160.0, 120.0), turn_deg, 1.0)
    M[0, 2] += shift
    offset = np.array([[1.0, 0.0, -90.0], [0.0, 1.0, -130.0], [0.0, 0.0, 1.0]])
    return cv2.warpAffine(source, (np.vstack([M, [0, 0, 1]]) @ offset)[:2], (320, 240), flags=cv2.INTER_CUBIC)


def place(image: Array, mode: HybridModule | None = None, count: int = 400) -> Place:
    chosen = mode or module()
    found = describe(image, empty_view(chosen), TIMES, chosen, count)  # type: ignore[arg-type]
    assert found is not None
    return found


def test_features_move_with_the_picture() -> None:
    """A picture moved by 7.5 frame px and turned by 30 degrees matches, and matches lie 15 colour px on, turned."""
    a, b = place(picture()), place(picture(7.5, 30.0))
    rows_a, rows_b = matches(a, b)
    assert len(rows_a) > 80
    angle = np.deg2rad(-30.0)
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    middle = np.array([320.5, 240.5])
    expected = (a.view.uv[rows_a] - middle) @ turn.T + middle + [15.0, 0.0]
    off = np.linalg.norm(b.view.uv[rows_b] - expected, axis=1)
    assert np.median(off) < 0.7
    assert np.mean(off < 3.0) > 0.9


def test_stated_deviations_are_those_of_matches() -> None:
    """Between noisy pictures of one place distances over stated deviations are between a third of what they say and
    what they say: the claim is careful, not boasting."""
    rng = np.random.default_rng(1)
    images = [np.clip(picture() + rng.normal(0, 4, (240, 320)), 0, 255).astype(np.uint8) for _ in range(2)]
    a, b = (place(image) for image in images)
    rows_a, rows_b = matches(a, b)
    sigma = np.sqrt(2.0) * a.view.ray_sigma_rad * 500.0
    off = np.linalg.norm(a.view.uv[rows_a] - b.view.uv[rows_b], axis=1)
    ratio = np.median(off) / (sigma * np.sqrt(2.0 * np.log(2.0)))
    assert 0.05 < ratio < 1.0


def test_another_place_hardly_matches() -> None:
    """Gravel does not look like grass: fewer than one match in twenty."""
    a, b = place(picture()), place(picture(name="grass"))
    assert len(matches(a, b)[0]) < 0.05 * len(a.view)


def test_an_even_picture_shows_nothing() -> None:
    """Without texture there is no place."""
    assert describe(np.full((240, 320), 90, np.uint8), empty_view(module()), TIMES, module(), 100) is None  # type: ignore[arg-type]
    one = place(picture())
    lone = Place(one.view.select(np.array([0])), one.descriptors[:1])
    assert len(matches(one, lone)[0]) == 0


def test_rows_have_their_own_times() -> None:
    """Features carry the time of the row that saw them."""
    found = place(picture())
    np.testing.assert_allclose(found.view.dt_s, (found.view.uv[:, 1] - 239.5) * 10e-6)


def test_left_out_clear_sites_move_features() -> None:
    """Where clear sites are left out, features move by the mean shift of the light: 0.167 px in one bin of four."""
    plain, left_out = place(picture()), place(picture(), module(clear_in_frame="omitted"))
    np.testing.assert_allclose(left_out.view.uv - plain.view.uv, np.full(plain.view.uv.shape, 1 / 6 / 4), atol=1e-9)


def test_flow_is_what_the_tracks_say(make_lap: Callable) -> None:
    """The median motion of a lap's tracks, about 0.7 m/s over 1 m, is found from rows read at different times."""
    lap = make_lap(row_time_s=20e-6)
    views = lap.views(0.1)
    rows = np.intersect1d(views[30].ids, views[31].ids, return_indices=True)
    true = np.median(views[31].uv[rows[2]] - views[30].uv[rows[1]], axis=0) * 60.0
    np.testing.assert_allclose(picture_flow(views[30], lap.lens), true, atol=25.0)
    assert not picture_flow(views[30].at_frame_time(), lap.lens).any()


def test_landmarks_are_where_the_world_is(make_lap: Callable) -> None:
    """Features triangulated with the places beside are right to 3 % of their distance, under true poses."""
    lap = make_lap(noise_px=0.3)
    views, world = lap.views(0.3), SparseMap()
    for frame in (20, 22, 26, 28, 32):
        twist = se3.log(se3.inverse(lap.world_from_camera[frame - 1]) @ lap.world_from_camera[frame + 1]) * 30.0
        world.add_keyframe(views[frame], lap.world_from_camera[frame], twist, 0)
    book = PlaceBook(world, lap.look)
    landmarks = book.landmarks(world.keyframes[2])
    known = np.isfinite(landmarks[:, 0])
    assert known.mean() > 0.6
    truth = lap.points[np.flatnonzero(lap.seen[26])]
    assert np.median(np.linalg.norm(landmarks - truth, axis=1)[known]) < 0.03 * 1.2


@pytest.mark.parametrize("kind", ["grey", "rgb", "mosaic", "deep", "linear"])
def test_every_kind_of_frame_becomes_a_grey_picture(kind: str) -> None:
    """Grey, RGB, mosaic and 16-bit pictures of one scene give pictures that match each other."""
    grey = picture()
    images = {
        "grey": (grey, module(response="gamma")),
        "rgb": (np.repeat(grey[..., None], 3, axis=2), module(response="gamma")),
        "mosaic": (
            np.where(np.add.outer(np.arange(240), np.arange(320)) % 2, grey, 0.7 * grey).astype(np.uint8),
            module(response="gamma", mosaic="RGGB"),
        ),
        "deep": (grey.astype(np.uint16) * 16, module(response="gamma", white_dn=4095)),
        "linear": (np.round(255 * (grey / 255.0) ** 2).astype(np.uint8), module()),
    }
    image, chosen = images[kind]
    seen = grey_picture(image, chosen.frame_mode)
    assert seen.dtype == np.uint8
    assert seen.shape == (240, 320)
    correlation = np.corrcoef(cv2.GaussianBlur(seen, (0, 0), 2).ravel(), cv2.GaussianBlur(grey, (0, 0), 2).ravel())[
        0, 1
    ]
    assert correlation > 0.98


def test_point_colours_are_the_pixels() -> None:
    """An RGB frame gives its colours at colour-array positions, a grey one grey, and the edge holds outside."""
    image = np.zeros((240, 320, 3), np.uint8)
    image[10, 20] = [255, 0, 51]
    uv = module().frame_mode.colour_from_frame(np.array([[20.0, 10.0], [500.0, 0.0]]))
    np.testing.assert_allclose(point_colours(image, module().frame_mode, uv), [[1.0, 0.0, 0.2], [0.0, 0.0, 0.0]])
    grey = point_colours(picture(), module().frame_mode, uv)
    assert np.ptp(grey, axis=1).max() == 0.0
