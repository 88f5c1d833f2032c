"""Board corners in the frames of every view, to hundredths of a pixel, each with its covariance.

Detection finds and names crossings. A rough lens and the poses then predict the picture around every inner corner,
those beside steady dark squares included, whose crossings have but one bright square. In the cell around each corner
a light model with known edge directions and blur, free position, four free levels and a free shading is fitted to the
difference of the bright and dark pictures. All edge pixels of the board enter, each once; distortion and perspective
inside a cell are in the model, so that big cells are no less exact than small ones.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.apertures import Aperture, frame_aperture
from hybridtrack.calibration.board_detection import Detection, detect_board, difference_picture
from hybridtrack.calibration.board_view import BoardPlace, place_frame_pixels, place_on_board, project_board
from hybridtrack.calibration.lens_fit import fit_lens
from hybridtrack.calibration.light_kernels import crossing_memberships
from hybridtrack.calibration.view_data import BoardCorners, BoardSearch, Lens, LensFit, ViewImages
from hybridtrack.calibration.view_light import FEWER_SAMPLES, ViewLight, fit_view_light
from hybridtrack.errors import HybridtrackError
from hybridtrack.module import HybridModule, Target
from hybridtrack.threads import each

Array = np.ndarray

_FIRST_SIGMA_PX = 0.15  # frame px, of a corner as detected
_CELL = 0.5  # of a square: half width of the cell around a corner
_REACH_PX = 14.0  # frame px: half width of the largest cell
_NEAR_EDGE = 4.0  # blurs: pixels further from both edges only fix the levels, and are thinned
_STEPS = 4
_MOST_MOVED_PX = 3.0  # colour px
_LEAST_EDGE = 0.15  # of the contrast
_ROUND_MODELS = (("k1", "fisheye2"), ("k1k2p", "fisheye4", "k1"))  # lens models tried in each round


@dataclass(frozen=True)
class _FramePicture:
    """One view's difference picture over its contrast, in reading order: `value`, `sigma` (M,), `place` of pixels."""

    value: Array
    sigma: Array
    place: BoardPlace
    aperture: Aperture
    shape: tuple[int, int]
    blur_px: float


@dataclass(frozen=True)
class _CellFit:
    """Displacement (2,) px of the picture, its covariance (2, 2), the cell's levels (q00, q10, q01, q11), and the
    slope (2,) per px of what shading the view's smooth contrast leaves."""

    shift: Array
    covariance: Array
    levels: Array
    shading: Array


def _cell_pixels(picture: _FramePicture, at_frame: Array, corner_m: Array, size_m: Array, binning: int) -> Array:
    """Reading-order indices of the pixels in the cell around a corner, those far from both edges thinned."""
    reach = int(np.ceil(_REACH_PX))
    x0, x1 = max(0, int(at_frame[0]) - reach), min(picture.shape[1], int(at_frame[0]) + reach + 2)
    y0, y1 = max(0, int(at_frame[1]) - reach), min(picture.shape[0], int(at_frame[1]) + reach + 2)
    if x1 <= x0 or y1 <= y0:
        return np.zeros(0, dtype=int)
    index = (np.arange(y0, y1)[:, None] * picture.shape[1] + np.arange(x0, x1)).ravel()
    offset = np.abs(picture.place.xy_m[index] - corner_m)
    scale = np.linalg.norm(picture.place.gradient[index], axis=-1)
    with np.errstate(invalid="ignore"):
        inside = np.all((offset < _CELL * size_m) & (offset / scale < _REACH_PX * binning), axis=1)
        near = np.any(offset / scale < _NEAR_EDGE * picture.blur_px + binning, axis=1)
    thinned = (np.arange(len(index)) % 3) == 0
    keep = inside & (near | thinned) & np.isfinite(picture.value[index])
    return index[keep]


def _levels_design(members: Array) -> Array:
    """Design (N, 4) of q00, q10, q01, q11 from A, B and AB."""
    a, b, ab = members[:, 0], members[:, 1], members[:, 2]
    return np.stack([1.0 - a - b + ab, a - ab, b - ab, ab], axis=1)


def _position_slopes(members: Array, levels: Array) -> Array:
    """d light / d (u, v) (N, 2) of the pixel for the given levels."""
    q00, q10, q01, q11 = levels
    d11 = q00 - q10 - q01 + q11
    return np.asarray((q10 - q00) * members[:, 3:5] + (q01 - q00) * members[:, 6:8] + d11 * members[:, 9:11])


def _pixel_offsets(place: BoardPlace, corner_m: Array) -> Array:
    """Offsets (N, 2) in px of pixels from the corner, to first order."""
    return np.linalg.solve(place.gradient, (place.xy_m - corner_m)[..., None])[..., 0]


def _fit_cell(picture: _FramePicture, index: Array, corner_m: Array) -> _CellFit | None:
    """Fit displacement, levels and shading in one cell; None where the picture does not fix them.

    A shading left out moves edges by its slope times the cell's width. One that is there before the blur moves them
    besides by sigma^2 grad ln(shading), sigma being that of blur and aperture together.
    """
    place, kind = picture.place[index], picture.aperture.kind.ravel()[index]
    value, weight = picture.value[index], 1.0 / picture.sigma[index]
    members, shift, offset = np.empty((len(index), 12)), np.zeros(2), _pixel_offsets(place, corner_m)
    shading = np.zeros(2)
    board, gradient = np.ascontiguousarray(place.xy_m), np.ascontiguousarray(place.gradient)
    for _ in range(_STEPS):
        crossing_memberships(board, gradient, picture.aperture.nodes, picture.aperture.weights, kind,
                             np.asarray(corner_m, float), shift, picture.blur_px, members)  # fmt: skip
        design = _levels_design(members) * (1.0 + offset @ shading)[:, None]
        if np.any(design.sum(0) < 3.0):
            return None
        normal = design.T @ (design * weight[:, None] ** 2)
        levels = np.linalg.solve(normal, design.T @ (value * weight**2))
        slopes = -_position_slopes(members, levels)  # moving the picture by +shift moves pixels by -shift
        light = design @ levels
        full = np.concatenate([slopes, design, light[:, None] * offset], axis=1) * weight[:, None]
        normal = full.T @ full
        left = (value - light) * weight
        if normal[0, 0] * normal[1, 1] - normal[0, 1] ** 2 < 1e-4 * np.trace(normal[:2, :2]) ** 2:
            return None
        try:
            inverse = np.linalg.inv(normal)
        except np.linalg.LinAlgError:
            return None
        change = inverse @ (full.T @ left)
        step = change[:2]
        shift, shading = shift + np.clip(step, -1.0, 1.0), shading + np.clip(change[6:], -0.01, 0.01)
        if np.hypot(*shift) > _MOST_MOVED_PX:
            return None
        if np.hypot(*step) < 1e-3:
            break
    left = left - full @ change
    excess = float(left @ left) / max(len(left) - 8, 1)
    # Scatter of a few hundred pixels measures the noise; the floor is for pictures without any.
    excess = max(excess, 1e-4)
    return _CellFit(shift, inverse[:2, :2] * excess, levels, shading)


def _contrast(light: ViewLight, place: BoardPlace, target: Target) -> Array:
    """Step (N,) of the difference picture across an edge of set A, smooth over the board."""
    bright, dark = light.levels(place, target)
    return np.asarray((bright[:, 0] - dark[:, 0]) - (bright[:, 1] - dark[:, 1]))


def _frame_picture(
    view: ViewImages, place: BoardPlace, aperture: Aperture, light: ViewLight, target: Target
) -> _FramePicture:
    """The difference picture over its smooth contrast across the edges of set A."""
    step = _contrast(light, place, target)
    usual = np.nanmedian(np.abs(step[np.isfinite(step)]))
    step = np.where(np.abs(step) > 0.2 * usual, step, np.nan)
    value = (view.bright_dn - view.dark_dn).ravel() / step
    noise = np.hypot(view.bright_sigma_dn, view.dark_sigma_dn).ravel() / np.abs(step)
    # One per cent of the contrast: what levels, blur and linearity leave even in a picture without noise.
    sigma = np.hypot(np.where(np.isfinite(noise), noise, 1.0), 0.01)
    return _FramePicture(value, sigma, place, aperture, view.bright_dn.shape, light.blur_px)


def _contrast_slope(light: ViewLight, lens: Lens, pose: Array, uv: Array, target: Target) -> Array:
    """d ln(contrast) / d uv (N, 2) of the view's smooth contrast at corners `uv` (N, 2)."""
    known = np.isfinite(uv).all(1)
    place = place_on_board(lens, pose, np.where(known[:, None], uv, 0.0))
    ends = [np.log(np.abs(_contrast(light, place.moved(move), target))) for move in (*np.eye(2), *-np.eye(2))]
    return np.where(known[:, None], 0.5 * np.stack([ends[0] - ends[2], ends[1] - ends[3]], axis=1), np.nan)


def _refine_view(
    view: ViewImages, board: BoardCorners, lens_fit: LensFit, target: Target, nominal: HybridModule
) -> BoardCorners:
    """All inner corners of one view that its pictures fix."""
    pose = lens_fit.camera_from_board[int(np.flatnonzero(lens_fit.views == board.view)[0])]
    mode, aperture = nominal.frame_mode, frame_aperture(nominal.frame_mode, nominal.cluster)
    place = place_frame_pixels(lens_fit.lens, pose, target, mode)
    light = fit_view_light(view, place, aperture, target, FEWER_SAMPLES)
    if light is None:
        return board
    picture = _frame_picture(view, place, aperture, light, target)
    size = np.array(target.square_xy_m)
    ij = np.stack(np.meshgrid(np.arange(1, target.columns), np.arange(1, target.rows)), axis=-1).reshape(-1, 2)
    uv = project_board(lens_fit.lens, pose, ij * size)
    at_frame = mode.frame_from_colour(uv)
    seen = np.all(np.isfinite(at_frame) & (at_frame > 1.0) & (at_frame < [mode.width - 2, mode.height - 2]), axis=1)
    slope = _contrast_slope(light, lens_fit.lens, pose, uv, target)
    spread = np.hypot(light.blur_px, mode.binning / np.sqrt(12.0))
    kept, positions, covariances = [], [], []
    for n in np.flatnonzero(seen):
        index = _cell_pixels(picture, at_frame[n], ij[n] * size, size, mode.binning)
        fit = _fit_cell(picture, index, ij[n] * size) if len(index) >= 25 else None
        if fit is None or np.ptp(fit.levels) < _LEAST_EDGE or not np.all(np.isfinite(fit.covariance)):
            continue
        kept.append(ij[n])
        positions.append(uv[n] + fit.shift + spread**2 * (fit.shading + slope[n]))
        covariances.append(fit.covariance)
    if len(kept) < 4:
        return board
    return replace(board, ij=np.array(kept), uv=np.array(positions), covariance=np.array(covariances),
                   event_xy=np.full((len(kept), 2), np.nan))  # fmt: skip


def refine_boards(
    views: list[ViewImages], boards: list[BoardCorners], lens_fit: LensFit, target: Target, nominal: HybridModule
) -> list[BoardCorners]:
    """Fit every inner corner of every board again, given a lens and poses within about a pixel.

    Boards that `lens_fit` does not hold come back as they were.
    """
    by_number = {view.index: view for view in views}
    held = set(lens_fit.views.tolist())

    def refined(board: BoardCorners) -> BoardCorners:
        return _refine_view(by_number[board.view], board, lens_fit, target, nominal) if board.view in held else board

    return each(refined, boards)


def _detect_all(views: list[ViewImages], target: Target, sign: float) -> list[Detection | str]:
    return each(lambda view: detect_board(sign * difference_picture(view), target), views)


def _detections(views: list[ViewImages], target: Target) -> list[Detection | str]:
    """Detections under the sign of the blink that explains more views.

    Which set of a counterphase board is bright first is only a convention of the blink analysis; steady dark squares
    tell, where there are any.
    """
    found = _detect_all(views, target, 1.0)
    if not target.is_counterphase or not target.steady_dark:
        return found
    other = _detect_all(views, target, -1.0)
    count = [sum(isinstance(each, Detection) for each in side) for side in (found, other)]
    return other if count[1] > count[0] else found


def _rough_board(view: ViewImages, detection: Detection, nominal: HybridModule) -> BoardCorners:
    uv = nominal.frame_mode.colour_from_frame(detection.xy)
    sigma = _FIRST_SIGMA_PX * nominal.frame_mode.binning
    return BoardCorners(view.index, detection.ij, uv, np.tile(sigma**2 * np.eye(2), (len(uv), 1, 1)),
                        np.full((len(uv), 2), np.nan), detection.labelling.half_turn_lead > 0)  # fmt: skip


def first_fit(
    boards: list[BoardCorners], target: Target, nominal: HybridModule, models: tuple[str, ...] = _ROUND_MODELS[-1]
) -> LensFit | None:
    """The fit of the model with the smallest residual; None where no model can be fitted."""
    fits = []
    for model in models:
        try:
            fits.append(fit_lens(boards, target, nominal, model))
        except HybridtrackError:
            continue
    return min(fits, key=lambda fit: fit.rms_px, default=None)


def find_boards(
    views: list[ViewImages], target: Target, nominal: HybridModule, rounds: int = len(_ROUND_MODELS)
) -> BoardSearch:
    """Find the board in every view; corners to hundredths of a pixel where three views or more fix a lens.

    Frame pixels are taken to sit where `nominal` says; where it omits clear sites from bins, the clear site must be
    the right one (see `geometry_fit`, which repeats the search once the event map has found it).
    """
    boards, findings = [], []
    for view, detection in zip(views, _detections(views, target), strict=True):
        if isinstance(detection, str):
            findings.append(f"view {view.index}: {detection}")
        else:
            boards.append(_rough_board(view, detection, nominal))
    for models in _ROUND_MODELS[:rounds]:
        fit = first_fit(boards, target, nominal, models)
        if fit is None:
            break
        boards = refine_boards(views, boards, fit, target, nominal)
    return BoardSearch(boards, findings)
