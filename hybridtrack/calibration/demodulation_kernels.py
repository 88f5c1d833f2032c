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
