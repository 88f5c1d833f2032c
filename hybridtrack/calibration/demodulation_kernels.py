"""Compiled loop of the frame demodulation: a straight line through each pixel's values over the frames."""

import numpy as np
from numba import prange

from hybridtrack.compiled import kernel

Array = np.ndarray


@kernel(parallel=True)
def fit_row_lines(
    light: Array, share: Array, least_spread: float, dark: Array, swing: Array, square: Array, frame_square: Array
) -> None:
    """Fit D + f K to `light` (N, H, W) with shares f (N, H).

    Fills `dark` D, `swing` K and `square`, the sum of squared residuals (all (H, W)), and `frame_square` (H, N), the
    mean of the row's squared residuals in each frame. NaN where a row's shares vary by less than `least_spread`
    (variance) or a sample is NaN.
    """
    count, height, width = light.shape
    for row in prange(height):
        mean = 0.0
        for n in range(count):
            mean += share[n, row] / count
        spread = 0.0
        for n in range(count):
            spread += (share[n, row] - mean) ** 2 / count
        total, moment = np.zeros(width), np.zeros(width)
        for n in range(count):
            lever = share[n, row] - mean
            for k in range(width):
                total[k] += light[n, row, k]
                moment[k] += lever * light[n, row, k]
        for k in range(width):
            slope = moment[k] / (count * spread) if spread > least_spread else np.nan
            swing[row, k] = slope
            dark[row, k] = total[k] / count - mean * slope
            square[row, k] = 0.0
        for n in range(count):
            good, size = 0, 0.0
            for k in range(width):
                residual = light[n, row, k] - dark[row, k] - share[n, row] * swing[row, k]
                square[row, k] += residual * residual
                if residual == residual:
                    good += 1
                    size += residual * residual
            frame_square[row, n] = size / good if good else np.nan


@kernel(parallel=True)
def fit_swept_lines(
    light: Array,
    table: Array,
    level: Array,
    least_spread: float,
    dark: Array,
    swing: Array,
    square: Array,
    mean_share: Array,
    spread_share: Array,
    frame_square: Array,
) -> None:
    """As `fit_row_lines`, with a share of its own for each pixel: `table` (N, H, Q) at the place `level` (H, W), 0 to
    Q - 1, in a straight line between entries. Also fills the shares' mean and variance (H, W)."""
    count, height, width = light.shape
    last = table.shape[2] - 2
    for row in prange(height):
        good, size = np.zeros(count), np.zeros(count)
        share = np.empty(count)
        for k in range(width):
            left = min(int(level[row, k]), last)
            part = level[row, k] - left
            mean, total = 0.0, 0.0
            for n in range(count):
                share[n] = (1.0 - part) * table[n, row, left] + part * table[n, row, left + 1]
                mean += share[n] / count
                total += light[n, row, k]
            spread, moment = 0.0, 0.0
            for n in range(count):
                spread += (share[n] - mean) ** 2 / count
                moment += (share[n] - mean) * light[n, row, k]
            slope = moment / (count * spread) if spread > least_spread else np.nan
            swing[row, k] = slope
            dark[row, k] = total / count - mean * slope
            mean_share[row, k] = mean
            spread_share[row, k] = spread
            square[row, k] = 0.0
            for n in range(count):
                residual = light[n, row, k] - dark[row, k] - share[n] * slope
                square[row, k] += residual * residual
                if residual == residual:
                    good[n] += 1
                    size[n] += residual * residual
        for n in range(count):
            frame_square[row, n] = size[n] / good[n] if good[n] else np.nan


@kernel(parallel=True)
def sum_bands(light: Array, weight: Array, noise: Array, delay: Array, band: Array, signal: Array, sums: Array) -> None:
    """Weighted sums of each row's pixels by band: `light` (N, H, W) times `weight` (H, W; zero: not used) into `signal`
    (B, H, N); `sums` (3, B, H): of |weight|, of (weight noise)^2, and of |weight| delay."""
    count, height, width = light.shape
    for row in prange(height):
        for k in range(width):
            w = weight[row, k]
            if w == 0.0:
                continue
            b = band[row, k]
            sums[0, b, row] += abs(w)
            sums[1, b, row] += (w * noise[row, k]) ** 2
            sums[2, b, row] += abs(w) * delay[row, k]
            for n in range(count):
                signal[b, row, n] += w * light[n, row, k]
