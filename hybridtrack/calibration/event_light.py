"""How large a step of log light each event pixel saw, read from the frames around it.

Well inside a square the light of an event pixel's own aperture is that of the frame pixels around it, whatever the
blur: their bright and dark light is averaged over a small box, so that frame noise hardly enters, and the step is
log(bright / dark). No light meter is needed, but the black level is. Across an edge the steps take all sizes; there
they come from the view's light model, levels and blur fitted to the frames, through the event pixel's own aperture.
"""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import map_coordinates, uniform_filter

from hybridtrack.calibration.apertures import frame_aperture, one_pixel_aperture
from hybridtrack.calibration.board_view import BoardPlace, inside_board, place_frame_pixels, place_on_board
from hybridtrack.calibration.view_data import Lens, ViewImages
from hybridtrack.calibration.view_light import FEWER_SAMPLES, class_fractions, fit_view_light
from hybridtrack.module import HybridModule, Target

Array = np.ndarray


@dataclass(frozen=True)
class SquareHits:
    """Which square each event pixel looks at: `column`, `row` (-1 off the board), its `kind` (1 set A, -1 set B, 0
    steady dark or off the board) and the `margin_px` to its nearest edge in colour px, all (rows, columns) of the event
    grid."""

    column: Array
    row: Array
    kind: Array
    margin_px: Array


@dataclass(frozen=True)
class EventSteps:
    """`log_step` (rows, columns): natural log of light after over light before the flip to bright of the pixel's own
    set, NaN but well inside blinking squares; `bright_dn`, `dark_dn` behind it. `edge_step` (rows, columns): log of
    light with set A bright over light with set A dark by the light model, NaN but near edges. `hits`: squares."""

    log_step: Array
    bright_dn: Array
    dark_dn: Array
    edge_step: Array
    hits: SquareHits


def square_hits(place: BoardPlace, shape: tuple[int, int], target: Target) -> SquareHits:
    """Squares that event pixels (rows, columns) with `place` (rows * columns) look at."""
    size = np.array(target.square_xy_m)
    position = place.xy_m / size
    with np.errstate(invalid="ignore"):
        cell = np.floor(position)
        to_edge = np.minimum(position - cell, cell + 1 - position) * size / np.linalg.norm(place.gradient, axis=-1)
        inside = np.all((cell >= 0) & (cell < [target.columns, target.rows]), axis=-1)
    cell = np.where(inside[..., None], cell, -1.0).astype(int)
    kind = np.where(inside, target.square_sets()[cell[..., 1], cell[..., 0]], 0)
    margin = np.where(inside, to_edge.min(axis=-1), 0.0)
    return SquareHits(*(a.reshape(shape) for a in (cell[..., 0], cell[..., 1], kind, margin)))


def box_mean(picture: Array, size: int) -> Array:
    """Mean over a box of `size` pixels, NaN where any of them is."""
    known = np.isfinite(picture)
    mean = uniform_filter(np.where(known, picture, 0.0), size)
    return np.where(uniform_filter(known.astype(float), size) > 1.0 - 0.5 / size**2, mean, np.nan)


def modelled_steps(
    view: ViewImages, module: HybridModule, place: BoardPlace, frame_place: BoardPlace, target: Target
) -> Array:
    """Log step (rows * columns) between the two states at event pixels with `place`, by the view's light model."""
    aperture = frame_aperture(module.frame_mode, module.cluster)
    light = fit_view_light(view, frame_place, aperture, target, FEWER_SAMPLES)
    result = np.full(len(place.xy_m), np.nan)
    if light is None:
        return result
    index = np.flatnonzero(inside_board(place, target, 6.0 + 3.0 * light.blur_px))
    own = one_pixel_aperture((len(index),))
    share = class_fractions(place[index], own, light.blur_px, target, light.squares)[..., 0]
    bright, dark = (np.sum(share * level, axis=1) for level in light.levels(place[index], target))
    with np.errstate(invalid="ignore", divide="ignore"):
        result[index] = np.where((bright > 0) & (dark > 0), np.log(bright / dark), np.nan)
    return result


def event_steps(
    view: ViewImages, module: HybridModule, lens: Lens, camera_from_board: Array, target: Target
) -> EventSteps:
    """Steps of all event pixels that look at the board, the module's map being calibrated."""
    positions = module.event_pixel_positions()
    place = place_on_board(lens, camera_from_board, positions.reshape(-1, 2))
    hits = square_hits(place, positions.shape[:2], target)
    mode, cluster = module.frame_mode, module.cluster
    box = max(3, 2 * (max(cluster.width, cluster.height) // (2 * mode.binning)) + 1)
    xy = mode.frame_from_colour(positions)
    where = np.stack([xy[..., 1], xy[..., 0]])
    state_a, state_b = (
        map_coordinates(box_mean(picture, box), where, order=1, mode="constant", cval=np.nan)
        for picture in (view.bright_dn, view.dark_dn)
    )
    bright = np.where(hits.kind >= 0, state_a, state_b)
    dark = np.where(hits.kind >= 0, state_b, state_a)
    # Blur of lens and aperture reaches a pixel or two beyond the box.
    far = hits.margin_px > 0.5 * box * mode.binning + 2.5
    with np.errstate(invalid="ignore", divide="ignore"):
        known = far & (hits.kind != 0) & (dark > 0) & (bright > dark)
        log_step = np.where(known, np.log(bright / dark), np.nan)
    frame_place = place_frame_pixels(lens, camera_from_board, target, mode)
    modelled = modelled_steps(view, module, place, frame_place, target)
    edge_step = np.where(far, np.nan, modelled.reshape(positions.shape[:2]))
    return EventSteps(log_step, bright, dark, edge_step, hits)
