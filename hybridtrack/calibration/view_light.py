"""How bright the board's squares are in one view, and how blurred: fitted to the frame pictures in linear light.

Each class of squares (set A, set B, steady dark; on a shuttered board the last two are one) has a level in each state
of the blink, a quadratic in board coordinates: lamps and lenses shade smoothly. With the levels linear and one blur
for the view, a few Gauss-Newton steps on the logarithm of the blur suffice.
"""

from dataclasses import dataclass, replace

import numpy as np

from hybridtrack.calibration.apertures import Aperture
from hybridtrack.calibration.board_view import BoardPlace, class_squares, fractions, inside_board
from hybridtrack.calibration.view_data import ViewImages
from hybridtrack.module import Target

Array = np.ndarray

_SAMPLES = 16000
FEWER_SAMPLES = 6000  # where the light only sets the scale of what is measured: corners, steps far from edges
_FIRST_BLUR_PX = 0.8
_BLUR_LIMITS_PX = (0.12, 12.0)
_GROSS = 6.0
_LEAST_PIXELS = 200


@dataclass(frozen=True)
class ViewLight:
    """Levels and blur of one view.

    `squares` (K, R, C): membership of squares in the K classes; `bright`, `dark` (K, 6): coefficients of the level in
    the state "A bright" and "A dark"; `blur_px`: deviation of the point spread in colour px; `residual`: root mean
    square of what the difference of the two pictures leaves, over the step of set A."""

    squares: Array
    bright: Array
    dark: Array
    blur_px: float
    residual: float

    def levels(self, place: BoardPlace, target: Target) -> tuple[Array, Array]:
        """Level (N, K) of every class at each place, in the bright and in the dark state."""
        basis = _basis(place.xy_m, target)
        return basis @ self.bright.T, basis @ self.dark.T


def _basis(xy_m: Array, target: Target) -> Array:
    """Quadratic terms (N, 6) in board coordinates scaled to -1..1."""
    extent = np.array([target.columns, target.rows]) * target.square_xy_m
    x, y = np.moveaxis(2.0 * xy_m / extent - 1.0, -1, 0)
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y], axis=-1)


def light_classes(target: Target) -> Array:
    """Membership (K, R, C) of squares in the classes that differ: A, and B with the steady dark, or each of the
    three."""
    squares = class_squares(target)
    if not target.is_counterphase:
        return np.stack([squares[0], squares[1] + squares[2]])
    return squares if squares[2].any() else squares[:2]


def class_fractions(place: BoardPlace, aperture: Aperture, blur_px: float, target: Target, squares: Array) -> Array:
    """Share and derivatives (N, K, 4) of each class, the last one being what the others leave: they sum to one."""
    shares = [fractions(place, aperture, blur_px, target, each) for each in squares[:-1]]
    rest = -np.sum(shares, axis=0)
    rest[:, 0] += 1.0
    return np.stack([*shares, rest], axis=1)


def _solve_levels(share: Array, basis: Array, value: Array, weight: Array) -> tuple[Array, Array]:
    """Coefficients (K, 6) of the levels, and residuals (N,)."""
    design = (share[:, :, None] * basis[:, None, :]).reshape(len(value), -1)
    solution, *_ = np.linalg.lstsq(design * weight[:, None], value * weight, rcond=1e-10)
    return solution.reshape(share.shape[1], 6), value - design @ solution


def _samples(place: BoardPlace, view: ViewImages, target: Target, margin_px: float, most: int) -> Array:
    """Indices of about `most` pixels on the board with both levels known, thinned evenly."""
    known = np.isfinite(view.bright_dn.ravel()) & np.isfinite(view.dark_dn.ravel())
    usable = np.flatnonzero(inside_board(place, target, margin_px) & known)
    step = max(1, len(usable) // most)
    # Every k-th pixel in reading order could beat with the rows; a fixed shuffle does not.
    order = np.random.default_rng(1).permutation(len(usable))
    return np.sort(usable[order[: len(usable) // step]])


def fit_view_light(
    view: ViewImages, place: BoardPlace, aperture: Aperture, target: Target, samples: int = _SAMPLES
) -> ViewLight | None:
    """Fit levels and blur to `samples` of the frame pixels, whose full bins' centres have `place` (Hf * Wf).

    Returns None where too little of the board is seen.
    """
    kinds = aperture.kind.ravel()
    squares = light_classes(target)
    index = _samples(place, view, target, 6.0, samples)
    if len(index) < _LEAST_PIXELS:
        return None
    here, basis = place[index], _basis(place.xy_m[index], target)
    bright, dark = view.bright_dn.ravel()[index], view.dark_dn.ravel()[index]
    step = float(np.percentile(np.abs(bright - dark), 95)) + 1e-12
    noise = np.hypot(view.bright_sigma_dn.ravel()[index], view.dark_sigma_dn.ravel()[index])
    weight = 1.0 / np.hypot(np.where(np.isfinite(noise), noise, step), 0.01 * step)
    light = ViewLight(squares, np.zeros((len(squares), 6)), np.zeros((len(squares), 6)), _FIRST_BLUR_PX, np.inf)
    for _ in range(8):
        share = class_fractions(here, replace(aperture, kind=kinds[index]), light.blur_px, target, squares)
        level_bright, left_bright = _solve_levels(share[..., 0], basis, bright, weight)
        level_dark, left_dark = _solve_levels(share[..., 0], basis, dark, weight)
        left = left_bright - left_dark
        slope = np.sum(share[..., 3] * (basis @ (level_bright - level_dark).T), axis=1)
        gross = np.abs(left * weight) > _GROSS * (1.4826 * np.median(np.abs(left * weight)) + 1e-9)
        weight = np.where(gross & (np.abs(slope) < 0.02 * step), 0.0, weight)
        change = float(np.sum(weight**2 * slope * left) / max(np.sum((weight * slope) ** 2), 1e-300))
        change = float(np.clip(change, -0.4, 0.4))
        blur = float(np.clip(light.blur_px * np.exp(change), *_BLUR_LIMITS_PX))
        residual = float(np.sqrt(np.mean(left[weight > 0] ** 2)) / step)
        light = ViewLight(squares, level_bright, level_dark, blur, residual)
        if abs(change) < 1e-3:
            break
    return light
