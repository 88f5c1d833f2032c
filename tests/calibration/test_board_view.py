"""Where picture points lie on the board, and what light pixels gather."""

import numpy as np
import pytest
from rendered_boards import LENS, board, shuttered_set

from hybridtrack.calibration.apertures import one_pixel_aperture
from hybridtrack.calibration.board_view import (
    board_from_colour_px,
    class_squares,
    fractions,
    inside_board,
    place_frame_pixels,
    place_on_board,
    project_board,
)
from hybridtrack.geometry import se3
from hybridtrack.module import FrameMode

POSE = se3.exp(np.array([-0.12, -0.1, 0.5, 0.3, -0.25, 0.8]))


def test_projection_and_back_are_inverse():
    """A point of the board's plane comes back to a nanometre."""
    xy = np.random.default_rng(0).uniform([0, 0], [0.36, 0.27], (50, 2))
    np.testing.assert_allclose(board_from_colour_px(LENS, POSE, project_board(LENS, POSE, xy)), xy, atol=1e-9)


def test_gradient_is_that_of_differences():
    """d board / d uv, lens distortion included."""
    uv = np.random.default_rng(1).uniform([50, 50], [430, 270], (30, 2))
    place = place_on_board(LENS, POSE, uv)
    h = 1e-4
    for k in range(2):
        ahead, back = (board_from_colour_px(LENS, POSE, uv + s * h * np.eye(2)[k]) for s in (1, -1))
        np.testing.assert_allclose(place.gradient[..., k], (ahead - back) / (2 * h), rtol=1e-5, atol=1e-9)


def test_rays_that_miss_the_plane_have_no_place():
    """A board seen edge on, or behind the camera, gives NaN, not a number."""
    behind = se3.compose(np.eye(3), np.array([0.0, 0.0, -1.0]))
    assert np.isnan(board_from_colour_px(LENS, behind, np.array([[240.0, 160.0]]))).all()


def test_frame_pixels_outside_the_boards_box_are_not_placed():
    """Inside the box places are the same as without it; elsewhere NaN."""
    mode, pose = FrameMode(width=240, height=160, binning=2), shuttered_set().poses[0]
    boxed = place_frame_pixels(LENS, pose, board(), mode)
    columns, rows = np.meshgrid(np.arange(240), np.arange(160))
    every = place_on_board(LENS, pose, mode.colour_from_frame(np.stack([columns, rows], -1)).reshape(-1, 2))
    on = inside_board(every, board(), 0.0)
    assert on.sum() > 1000
    np.testing.assert_allclose(boxed.xy_m[on], every.xy_m[on])
    assert np.isnan(boxed.xy_m).any()


def test_classes_share_the_board():
    """Each square is in one class, and a pixel's shares of all classes sum to one on the board."""
    squares = class_squares(board())
    np.testing.assert_array_equal(squares.sum(0), 1.0)
    assert squares[2].sum() == 3
    uv = project_board(LENS, POSE, np.random.default_rng(2).uniform([0.03, 0.03], [0.33, 0.24], (200, 2)))
    place = place_on_board(LENS, POSE, uv)
    share = [fractions(place, one_pixel_aperture((200,)), 0.8, board(), each)[:, 0] for each in squares]
    np.testing.assert_allclose(np.sum(share, axis=0), 1.0, atol=1e-9)


def test_margin_is_measured_in_the_picture():
    """`inside_board` keeps its distance from the edge in px, whatever the board's scale in the picture."""
    xy = np.stack([np.linspace(0.0, 0.02, 400), np.full(400, 0.13)], axis=1)
    uv = project_board(LENS, POSE, xy)
    inside = inside_board(place_on_board(LENS, POSE, uv), board(), 5.0)
    first = uv[np.flatnonzero(inside)[0]]
    edge = project_board(LENS, POSE, np.stack([np.zeros(2000), np.linspace(0.1, 0.16, 2000)], axis=1))
    assert np.min(np.linalg.norm(edge - first, axis=1)) == pytest.approx(5.0, rel=0.05)
