"""What each event pixel should see of a view's blink: its log step of light, and how that moves with its position.

The step is ln(L1 / L2) with L1 and L2 the light of the pixel's own aperture in the two states: sums over classes of
squares of their levels, measured in linear light on the frames, times the share of the blurred aperture on them.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.apertures import one_pixel_aperture
from hybridtrack.calibration.board_view import BoardPlace, inside_board, place_on_board
from hybridtrack.calibration.view_data import LensFit, ViewImages
from hybridtrack.calibration.view_light import ViewLight, class_fractions
from hybridtrack.geometry import so3
from hybridtrack.module import Target

Array = np.ndarray

_MARGIN_PX = 5.0  # colour px kept from the board's outer edge, whose surround has an unknown light
_LEAST_LIGHT = 1e-3  # of the view's brightest level
_NEAR_BLURS, _NEAR_PX = 4.0, 2.5  # how near an edge a pixel counts as an edge pixel
_FLAT_SHARE = 0.3  # of pixels away from edges that take part, for gains and the curve


@dataclass(frozen=True)
class PixelPlaces:
    """The event pixels of one view that take part.

    `pixel` (N,): reading-order index on the event grid; `count` (N,): measured amplitude; `place`: where they look on
    the board; `levels_1`, `levels_2` (N, K): light of the classes of squares there in the two states, and `slopes_1`,
    `slopes_2` (N, K, 2) per px.
    """

    view: int
    pixel: Array
    count: Array
    place: BoardPlace
    levels_1: Array
    levels_2: Array
    slopes_1: Array
    slopes_2: Array
    squares: Array
    blur_px: float

    def only(self, keep: Array) -> "PixelPlaces":
        """The pixels at the given indices, or where the given mask holds."""
        return replace(self, pixel=self.pixel[keep], count=self.count[keep], place=self.place[keep],
                       levels_1=self.levels_1[keep], levels_2=self.levels_2[keep],
                       slopes_1=self.slopes_1[keep], slopes_2=self.slopes_2[keep])  # fmt: skip


@dataclass(frozen=True)
class PixelSteps:
    """Predicted log steps (N,) of the pixels of one view, and their derivatives by position (N, 2) and ln(blur)
    (N,)."""

    pixel: Array
    count: Array
    step: Array
    d_uv: Array
    d_blur: Array


def _taking_part(place: BoardPlace, target: Target, blur_px: float, seed: int) -> Array:
    """Mask (N,) of edge pixels and of a share of the others, drawn anew in each view."""
    size = np.array(target.square_xy_m)
    with np.errstate(invalid="ignore"):
        offset = np.abs(place.xy_m - np.round(place.xy_m / size) * size) / np.linalg.norm(place.gradient, axis=-1)
        near = np.any(offset < _NEAR_BLURS * blur_px + _NEAR_PX, axis=1)
    return np.asarray(near | (np.random.default_rng(seed).random(len(near)) < _FLAT_SHARE))


def _level_slopes(light: ViewLight, place: BoardPlace, target: Target) -> tuple[Array, Array]:
    """d level / d uv (N, K, 2) of every class in the bright and in the dark state."""
    u_ahead, u_back, v_ahead, v_back = (
        light.levels(place.moved(np.array(move)), target) for move in ((1, 0), (-1, 0), (0, 1), (0, -1))
    )
    slopes = [np.stack([u_ahead[s] - u_back[s], v_ahead[s] - v_back[s]], axis=-1) / 2.0 for s in (0, 1)]
    return slopes[0], slopes[1]


def choose_pixels(
    view: ViewImages, light: ViewLight, lens_fit: LensFit, pose: Array, target: Target, uv: Array
) -> PixelPlaces:
    """The event pixels of one view that look at the board from colour positions `uv` (He, We, 2)."""
    place, count = place_on_board(lens_fit.lens, pose, uv.reshape(-1, 2)), view.amplitude.ravel()
    usable = inside_board(place, target, _MARGIN_PX) & np.isfinite(count)
    pixel = np.flatnonzero(usable & _taking_part(place, target, light.blur_px, view.index))
    place = place[pixel]
    levels_1, levels_2 = light.levels(place, target)
    least = _LEAST_LIGHT * float(np.percentile(np.maximum(levels_1, levels_2), 99)) if len(pixel) else 0.0
    slopes = _level_slopes(light, place, target)
    return PixelPlaces(view.index, pixel, count[pixel], place, np.maximum(levels_1, least),
                       np.maximum(levels_2, least), *slopes, light.squares, light.blur_px)  # fmt: skip


def predict_steps(places: PixelPlaces, target: Target, shift_px: Array, blur_factor: float) -> PixelSteps:
    """Predict the steps of pixels moved by `shift_px` (N, 2) from their places; `blur_factor` multiplies the blur."""
    aperture = one_pixel_aperture((len(places.pixel),))
    blur = places.blur_px * blur_factor
    share = class_fractions(places.place.moved(shift_px), aperture, blur, target, places.squares)
    # Shaded before it is blurred, an edge moves by sigma^2 grad ln(level): to first order in the slopes of the levels.
    spread = blur**2 + 1.0 / 12.0
    moved = spread * share[..., 1:3]
    light_1 = np.sum(places.levels_1 * share[..., 0], axis=1) + np.sum(places.slopes_1 * moved, axis=(1, 2))
    light_2 = np.sum(places.levels_2 * share[..., 0], axis=1) + np.sum(places.slopes_2 * moved, axis=(1, 2))
    light_1, light_2 = np.maximum(light_1, 1e-9), np.maximum(light_2, 1e-9)
    rate = places.levels_1 / light_1[:, None] - places.levels_2 / light_2[:, None]
    d_uv = np.einsum("nk,nkj->nj", rate, share[..., 1:3])
    d_blur = np.einsum("nk,nk->n", rate, share[..., 3])
    return PixelSteps(places.pixel, places.count, np.log(light_1 / light_2), d_uv, d_blur)


def picture_motion(places: PixelPlaces, lens_fit: LensFit, pose: Array) -> Array:
    """How the board's picture moves at each pixel, d uv (N, 2, 6 + P): by the pose's twist and the free lens terms."""
    board = np.concatenate([places.place.xy_m, np.zeros((len(places.pixel), 1))], axis=1)
    R, t = pose[:3, :3], pose[:3, 3]
    _, d_point, d_lens = lens_fit.lens.project_with_jacobians(board @ R.T + t)
    d_board = d_point @ R
    free = [f"lens.{name}" in lens_fit.parameters for name in lens_fit.lens.names]
    return np.concatenate([d_board, -d_board @ so3.hat(board), d_lens[..., free]], axis=-1)
