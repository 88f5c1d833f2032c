"""The board in one picture: crossings, grid, labels; positions to a tenth of a pixel, to be refined by `corners`."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.board_labels import Labelling, label_grid, read_cells
from hybridtrack.calibration.grid_growth import largest_grid
from hybridtrack.calibration.saddle_points import find_saddles
from hybridtrack.calibration.view_data import ViewImages
from hybridtrack.module import Target

Array = np.ndarray

_SCALES_PX = (1.2, 2.0, 3.5)
_ENOUGH = 0.8  # of the board's corners: no other scale is tried


@dataclass(frozen=True)
class Detection:
    """Corners `ij` (N, 2) of the board at `xy` (N, 2) frame px, with the labelling that named them."""

    ij: Array
    xy: Array
    labelling: Labelling


def difference_picture(view: ViewImages) -> Array:
    """Bright minus dark (H, W): saturated pixels as bright as the brightest, NaN where the picture is not known."""
    picture = view.bright_dn - view.dark_dn
    known = np.isfinite(picture)
    if not known.any():
        return picture
    saturated = ~np.isfinite(view.bright_dn) & np.isfinite(view.dark_dn)
    return np.where(saturated, float(np.percentile(picture[known], 99.5)), picture)


def _balanced(picture: Array, counterphase: bool) -> Array:
    """The picture with its strongest values clipped, so that a glare does not set the scale; zero where not known."""
    high = np.nanpercentile(picture, 99.0)
    low = np.nanpercentile(picture, 1.0) if counterphase else 0.0
    return np.nan_to_num(np.clip(picture, 1.5 * min(low, 0.0), 1.5 * max(high, 0.0)))


def detect_board(picture: Array, target: Target) -> Detection | str:
    """Find and name the board's corners in `picture` (H, W), positive where set A is brighter than when dark; NaN where
    not known.

    Returns the detection, or a phrase that says what was missing.
    """
    known = np.isfinite(picture)
    if not known.any():
        return "its frames could not be told into bright and dark"
    balanced = _balanced(picture, target.is_counterphase)
    most, best = 0, None
    total = (target.columns - 1) * (target.rows - 1)
    for scale in _SCALES_PX:
        saddles = find_saddles(balanced, known, scale)
        grid = largest_grid(saddles)
        most = max(most, len(grid.index))
        if not grid.index:
            continue
        labelling = label_grid(grid, read_cells(grid, saddles, balanced, known, target.is_counterphase), target)
        if labelling is None:
            continue
        on_board = labelling.ij[:, 0] > 0
        detection = Detection(labelling.ij[on_board], saddles.xy[grid.members()][on_board], labelling)
        if best is None or len(detection.ij) > len(best.ij):
            best = detection
        if len(best.ij) >= _ENOUGH * total:
            break
    if best is not None:
        return best
    if most == 0:
        return "no grid of squares that blink was seen"
    return f"a grid of {most} crossings was seen, but its place on the board is not clear"
