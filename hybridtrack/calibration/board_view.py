"""The board as one view shows it: positions on the board, and the light that pixels gather from each set of squares.

The light of a pixel is sum_c level_c(p) f_c(p) over classes of squares c: set A, set B and steady dark. f_c is the
share of the pixel's blurred aperture that looks at squares of class c (see light_kernels); the level of a class in
each state of the blink is a smooth surface over the board.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.apertures import Aperture
from hybridtrack.calibration.light_kernels import square_fractions
from hybridtrack.calibration.view_data import Lens
from hybridtrack.module import FrameMode, Target

Array = np.ndarray


@dataclass(frozen=True)
class BoardPlace:
    """Positions of picture points on the board: `xy_m` (N, 2), and `gradient` (N, 2, 2) = d xy / d uv in m/px."""

    xy_m: Array
    gradient: Array

    def __getitem__(self, index: Array) -> "BoardPlace":
        return BoardPlace(self.xy_m[index], self.gradient[index])

    def moved(self, shift_px: Array) -> "BoardPlace":
        """Places of the points moved by `shift_px` (N, 2) or (2,), to first order."""
        return BoardPlace(self.xy_m + (self.gradient @ np.asarray(shift_px)[..., None])[..., 0], self.gradient)


def board_from_colour_px(lens: Lens, camera_from_board: Array, uv: Array) -> Array:
    """Board coordinates (..., 2) in m of colour positions `uv` (..., 2); NaN where the ray misses the board's plane."""
    direction = lens.unproject(uv, allow_outside=True)
    R, t = camera_from_board[:3, :3], camera_from_board[:3, 3]
    normal = R[:, 2]
    along = direction @ normal
    with np.errstate(divide="ignore", invalid="ignore"):
        distance = np.where(np.abs(along) > 1e-9, (normal @ t) / along, np.nan)
    distance = np.where(distance > 0, distance, np.nan)
    return ((distance[..., None] * direction - t) @ R)[..., :2]


def place_on_board(lens: Lens, camera_from_board: Array, uv: Array) -> BoardPlace:
    """Places of colour positions `uv` (N, 2) on the board; NaN where the ray misses."""
    xy = board_from_colour_px(lens, camera_from_board, uv)
    R, t = camera_from_board[:3, :3], camera_from_board[:3, 3]
    _, d_uv_d_point, _ = lens.project_with_jacobians(xy @ R[:, :2].T + t)
    forward = d_uv_d_point @ R[:, :2]
    det = forward[..., 0, 0] * forward[..., 1, 1] - forward[..., 0, 1] * forward[..., 1, 0]
    gradient = np.empty_like(forward)
    gradient[..., 0, 0], gradient[..., 1, 1] = forward[..., 1, 1], forward[..., 0, 0]
    gradient[..., 0, 1], gradient[..., 1, 0] = -forward[..., 0, 1], -forward[..., 1, 0]
    with np.errstate(divide="ignore", invalid="ignore"):
        gradient /= det[..., None, None]
    return BoardPlace(xy, gradient)


def project_board(lens: Lens, camera_from_board: Array, xy_m: Array) -> Array:
    """Colour positions (..., 2) of points `xy_m` (..., 2) of the board's plane."""
    R, t = camera_from_board[:3, :3], camera_from_board[:3, 3]
    return lens.project(xy_m @ R[:, :2].T + t)


def _outline_m(target: Target) -> Array:
    """Points (N, 2) along the board's outer edge."""
    along = np.linspace(0.0, 1.0, 25)
    sides = [np.stack([along, np.full(25, end)], axis=1) for end in (0.0, 1.0)]
    unit = np.concatenate([*sides, *(side[:, ::-1] for side in sides)])
    return unit * (np.array([target.columns, target.rows]) * target.square_xy_m)


def place_frame_pixels(lens: Lens, camera_from_board: Array, target: Target, mode: FrameMode) -> BoardPlace:
    """Places of all frame pixels' full bins (Hf * Wf); NaN outside the box around the board's picture."""
    columns, rows = np.meshgrid(np.arange(mode.width), np.arange(mode.height))
    centres = mode.colour_from_frame(np.stack([columns, rows], axis=-1)).reshape(-1, 2)
    outline = project_board(lens, camera_from_board, _outline_m(target))
    known = np.isfinite(outline).all()
    low, high = (outline.min(0), outline.max(0)) if known else (np.full(2, -np.inf), np.full(2, np.inf))
    inside = np.flatnonzero(np.all((centres >= low) & (centres <= high), axis=1))
    here = place_on_board(lens, camera_from_board, centres[inside])
    place = BoardPlace(np.full((len(centres), 2), np.nan), np.full((len(centres), 2, 2), np.nan))
    place.xy_m[inside], place.gradient[inside] = here.xy_m, here.gradient
    return place


def class_squares(target: Target) -> Array:
    """One where a square belongs to the class, (3, R, C): set A, set B, steady dark."""
    columns, rows = np.meshgrid(np.arange(target.columns), np.arange(target.rows))
    squares = np.zeros((3, target.rows, target.columns))
    squares[0] = (columns + rows) % 2 == 0
    squares[1] = 1.0 - squares[0]
    for column, row in target.steady_dark:
        squares[:, row, column] = (0.0, 0.0, 1.0)
    return squares


def fractions(place: BoardPlace, aperture: Aperture, sigma_px: float, target: Target, squares: Array) -> Array:
    """Blurred value of `squares` (R, C) at each place: (N, 4) value, d/du, d/dv, d/d ln(sigma).

    `aperture.kind` is (N,), the class of each pixel.
    """
    out = np.empty((len(place.xy_m), 4))
    square_fractions(
        np.ascontiguousarray(place.xy_m), np.ascontiguousarray(place.gradient), aperture.nodes, aperture.weights,
        np.ascontiguousarray(aperture.kind), np.array(target.square_xy_m), float(sigma_px),
        np.ascontiguousarray(squares, dtype=float), out,
    )  # fmt: skip
    return out


def inside_board(place: BoardPlace, target: Target, margin_px: float) -> Array:
    """Whether each place lies on the board, at least `margin_px` of the picture away from its outer edge."""
    scale = np.linalg.norm(place.gradient, axis=-1) * margin_px
    extent = np.array([target.columns, target.rows]) * target.square_xy_m
    with np.errstate(invalid="ignore"):
        return np.all((place.xy_m > scale) & (place.xy_m < extent - scale), axis=-1)
