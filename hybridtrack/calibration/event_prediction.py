"""What each event pixel should see of a view's blink: its log step of light, and how that moves with its position.

The step is ln(L1 / L2) with L1 and L2 the light of the pixel's own aperture in the two states: sums over classes of
squares of their levels, measured in linear light on the frames, times the share of the blurred aperture on them.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.apertures import one_pixel_aperture
from hybridtrack.calibration.board_view import inside_board, place_on_board
from hybridtrack.calibration.view_data import LensFit, ViewImages
from hybridtrack.calibration.view_light import ViewLight, class_fractions
from hybridtrack.geometry import so3
from hybridtrack.module import Target

Array = np.ndarray

_MARGIN_PX = 5.0  # colour px kept from the board's outer edge, whose surround has an unknown light
_LEAST_LIGHT = 1e-3  # of the view's brightest level


@dataclass(frozen=True)
class EventSteps:
    """Predicted steps of one view's event pixels that look at the board.

    `pixel` (N,): reading-order index on the event grid; `count` (N,): measured amplitude; `step` (N,): log step;
    `d_uv` (N, 2), `d_blur` (N,): its derivative by position and by ln(blur); `d_pose` (N, 6), `d_lens` (N, P): by the
    view's pose twist and by the free lens parameters; `edge_px` (N,): distance to the next edge is below some blurs.
    """

    view: int
    pixel: Array
    count: Array
    step: Array
    d_uv: Array
    d_blur: Array
    d_pose: Array
    d_lens: Array


def _picture_motion(lens_fit: LensFit, pose: Array, xy_m: Array) -> tuple[Array, Array]:
    """d uv of the board's points (N, 2) by pose twist (N, 2, 6) and by the free lens parameters (N, 2, P)."""
    board = np.concatenate([xy_m, np.zeros((len(xy_m), 1))], axis=1)
    R, t = pose[:3, :3], pose[:3, 3]
    _, d_point, d_lens = lens_fit.lens.project_with_jacobians(board @ R.T + t)
    d_board = d_point @ R
    free = [f"lens.{name}" in lens_fit.parameters for name in lens_fit.lens.names]
    return np.concatenate([d_board, -d_board @ so3.hat(board)], axis=-1), d_lens[..., free]


def predict_steps(view: ViewImages, light: ViewLight, lens_fit: LensFit, pose: Array, target: Target,
                  uv: Array, blur_factor: float) -> EventSteps:
    """Predict the steps of the event pixels at colour positions `uv` (He, We, 2).

    `blur_factor` multiplies the blur found on the frames.
    """
    place = place_on_board(lens_fit.lens, pose, uv.reshape(-1, 2))
    count = view.amplitude.ravel()
    pixel = np.flatnonzero(inside_board(place, target, _MARGIN_PX) & np.isfinite(count))
    place = place[pixel]
    blur = light.blur_px * blur_factor
    share = class_fractions(place, one_pixel_aperture((len(pixel),)), blur, target, light.squares)
    levels_1, levels_2 = light.levels(place, target)
    least = _LEAST_LIGHT * float(np.percentile(np.maximum(levels_1, levels_2), 99)) if len(pixel) else 0.0
    levels_1, levels_2 = np.maximum(levels_1, least), np.maximum(levels_2, least)
    light_1 = np.maximum(np.sum(levels_1 * share[..., 0], axis=1), least)
    light_2 = np.maximum(np.sum(levels_2 * share[..., 0], axis=1), least)
    rate = levels_1 / light_1[:, None] - levels_2 / light_2[:, None]
    d_uv = np.einsum("nk,nkj->nj", rate, share[..., 1:3])
    d_blur = np.einsum("nk,nk->n", rate, share[..., 3])
    d_pose, d_lens = _picture_motion(lens_fit, pose, place.xy_m)
    return EventSteps(
        view.index, pixel, count[pixel], np.log(light_1 / light_2), d_uv, d_blur,
        -np.einsum("nj,njk->nk", d_uv, d_pose), -np.einsum("nj,njk->nk", d_uv, d_lens),
    )  # fmt: skip


def only(steps: EventSteps, keep: Array) -> EventSteps:
    """The pixels at the given indices, or where the given mask holds."""
    fields = ("pixel", "count", "step", "d_uv", "d_blur", "d_pose", "d_lens")
    return replace(steps, **{name: getattr(steps, name)[keep] for name in fields})
