"""Normal equations of the event map, with a gain for each pixel integrated out.

The count of pixel p in view v is  c = g_p s_v H(step_p,v) + noise,  H the common curve, s the view's scale, and g_p one
plus a normal deviate of variance tau^2. Integrating g_p out of the normal equations (a rank-one change for each pixel)
gives the same estimate as fitting it under that prior, and a covariance that knows it was fitted.

Unknowns z: six coefficients of the affine displacement and the radial term (see `MapBasis`), ln(blur factor), the
heights of the curve, and ln(scale) of each view.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.count_curve import CountCurve, CountNoise, smoothness
from hybridtrack.calibration.event_prediction import PixelSteps
from hybridtrack.module import HybridModule
from hybridtrack.threads import each

Array = np.ndarray

MAP_TERMS = 7
_SCALE_SIGMA = 0.5
_BLUR_SIGMA = 0.05
_ROUGHNESS = 0.5  # of the mean height: how sharply the curve may bend at a knot
_HUBER = 2.5
_GROSS = 7.0


@dataclass(frozen=True)
class MapBasis:
    """Displacement of an event pixel: u = a0 + a1 x + a2 y, v = a3 + a4 x + a5 y with x, y the grid scaled to -1..1,
    plus a6 r^2 (p - centre), r in units of half the array's diagonal. `offset` (He, We, 2) is p - centre."""

    grid: Array
    offset: Array
    half_diagonal_px: float

    def rows(self, pixel: Array) -> Array:
        """d displacement / d coefficients (N, 2, 7) of pixels by reading-order index."""
        x, y = self.grid.reshape(-1, 2)[pixel].T
        one, zero = np.ones_like(x), np.zeros_like(x)
        p = self.offset.reshape(-1, 2)[pixel]
        radial = np.sum((p / self.half_diagonal_px) ** 2, axis=1)[:, None] * p
        u = np.stack([one, x, y, zero, zero, zero, radial[:, 0]], axis=1)
        v = np.stack([zero, zero, zero, one, x, y, radial[:, 1]], axis=1)
        return np.stack([u, v], axis=1)


def map_basis(module: HybridModule, positions: Array, centre: Array) -> MapBasis:
    """The basis about event positions (He, We, 2)."""
    grid = module.event_grid
    x = (np.arange(grid.width) - (grid.width - 1) / 2.0) / (grid.width / 2.0)
    y = (np.arange(grid.height) - (grid.height - 1) / 2.0) / (grid.height / 2.0)
    return MapBasis(np.stack(np.meshgrid(x, y), axis=-1), positions - centre, module.colour_array.half_diagonal_px)


@dataclass(frozen=True)
class MapModel:
    """What predicts counts from steps, given the map: curve, `log_scale` (V,), noise, and spread of gains."""

    curve: CountCurve
    log_scale: Array
    noise: CountNoise
    gain_variance: float
    gain: Array


@dataclass(frozen=True)
class MapNormal:
    """Normal equations. `matrix` (S, S), `right` (S,); by view its pull `scores` (V, S), the covariance
    `spread` (V, S, S) that noise alone gives it, and `nuisance` (V, S, 6 + P): cross terms with the view's pose twist
    and the lens. `gain_excess` (pixels,), and its posterior variance."""

    matrix: Array
    right: Array
    scores: Array
    spread: Array
    nuisance: Array
    gain_excess: Array
    gain_variance: Array


@dataclass(frozen=True)
class _Rows:
    """One view's residuals (N,) at gain 1, design (N, S), predicted counts (N,) at gain 1, weights (N,), and slopes
    (N,) of the count with gain, by log step and by px."""

    residual: Array
    design: Array
    predicted: Array
    weight: Array
    slope: Array
    slope_px: Array


def _rows_of(steps: PixelSteps, v: int, views: int, model: MapModel, basis: MapBasis) -> _Rows:
    scale, gain = float(np.exp(model.log_scale[v])), model.gain[steps.pixel]
    predicted = scale * model.curve.value(steps.step)
    slope = gain * scale * model.curve.slope(steps.step)
    by_map = np.einsum("nj,njk->nk", steps.d_uv, basis.rows(steps.pixel)) * slope[:, None]
    by_blur = (steps.d_blur * slope)[:, None]
    by_curve = model.curve.design(steps.step) * (gain * scale)[:, None]
    by_scale = np.zeros((len(slope), views))
    by_scale[:, v] = predicted * gain
    design = np.concatenate([by_map, by_blur, by_curve, by_scale], axis=1)
    slope_px = np.abs(slope) * np.linalg.norm(steps.d_uv, axis=1)
    # Noise beyond the gain's own, which is integrated out.
    variance = model.noise.variance(predicted * gain, slope_px)
    left = np.abs(steps.count - gain * predicted) / np.sqrt(variance)
    robust = np.where(left > _GROSS, 0.0, np.minimum(1.0, _HUBER / np.maximum(left, 1e-9)))
    return _Rows(steps.count - predicted, design, predicted, robust / variance, slope, slope_px)


def _prior(model: MapModel, views: int) -> tuple[Array, Array]:
    """Information (S, S) and right side (S,) of the weak priors."""
    size = MAP_TERMS + 1 + len(model.curve.knots) + views
    matrix, right = np.zeros((size, size)), np.zeros(size)
    curve = slice(MAP_TERMS + 1, MAP_TERMS + 1 + len(model.curve.knots))
    bend = smoothness(model.curve) / (_ROUGHNESS * max(float(np.mean(np.abs(model.curve.heights))), 1e-9))
    matrix[curve, curve] = bend.T @ bend
    right[curve] = -bend.T @ (bend @ model.curve.heights)
    scales = np.arange(curve.stop, size)
    matrix[scales, scales] = _SCALE_SIGMA**-2
    right[scales] = -model.log_scale * _SCALE_SIGMA**-2
    return matrix, right


def accumulate(
    all_steps: list[PixelSteps], model: MapModel, basis: MapBasis, log_blur: float, motions: list[Array] | None = None
) -> MapNormal:
    """Normal equations about the present state.

    `motions` [view] (N, 2, 6 + P), where given: d uv of the board's picture by the view's pose twist and the lens, for
    the cross terms with them.
    """
    views, pixels = len(all_steps), len(model.gain)
    matrix, right = _prior(model, views)
    matrix[MAP_TERMS, MAP_TERMS] += _BLUR_SIGMA**-2
    right[MAP_TERMS] -= log_blur * _BLUR_SIGMA**-2
    size = len(right)
    pull, power, excess = np.zeros((pixels, size)), np.zeros(pixels), np.zeros(pixels)
    rows = each(lambda v: _rows_of(all_steps[v], v, views, model, basis), range(views))
    for steps, row in zip(all_steps, rows, strict=True):
        toward = row.weight * row.predicted
        pull[steps.pixel] += toward[:, None] * row.design
        power[steps.pixel] += toward * row.predicted
        excess[steps.pixel] += toward * row.residual
    shrunk = 1.0 / (power + 1.0 / model.gain_variance)
    gain_excess = excess * shrunk
    scores, spread, total = np.zeros((views, size)), np.zeros((views, size, size)), np.zeros((size, size))
    nuisance = np.zeros((views, size, 0 if motions is None else motions[0].shape[-1]))
    for v, (steps, row) in enumerate(zip(all_steps, rows, strict=True)):
        own = row.design - (row.predicted * shrunk[steps.pixel])[:, None] * pull[steps.pixel]
        own *= row.weight[:, None]
        total += own.T @ row.design
        # A view's own pull, gains taken off: what they have in common between views cancels in the sum only.
        left = row.residual - row.predicted * gain_excess[steps.pixel]
        scores[v] = row.design.T @ (row.weight * left)
        free = 1.0 - row.weight * row.predicted**2 * shrunk[steps.pixel]
        spread[v] = row.design.T @ (row.design * (row.weight * free)[:, None])
        if motions is not None:
            slope = row.slope[:, None] * steps.d_uv
            # The board's picture moving one way is the pixel moving the other.
            nuisance[v] = -own.T @ np.einsum("nj,njk->nk", slope, motions[v])
    return MapNormal(matrix + total, right + scores.sum(0), scores, spread, nuisance, gain_excess, shrunk)


def left_over(steps: PixelSteps, v: int, model: MapModel, basis: MapBasis) -> tuple[Array, Array, Array]:
    """Residual (N,) with gains, predicted count (N,), and |d count / d px| (N,) of one view."""
    row = _rows_of(steps, v, len(model.log_scale), model, basis)
    gain = model.gain[steps.pixel]
    return row.residual - row.predicted * (gain - 1.0), row.predicted * gain, row.slope_px
