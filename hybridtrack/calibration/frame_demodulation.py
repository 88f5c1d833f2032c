"""Bright and dark picture of a view, from frames that saw the board blink.

With the shares f[n, r] known, every pixel of row r is a line D + f K over the frames. Least squares gives dark_dn = D
and bright_dn = D + K. The noise of a single frame follows the photon-transfer line, variance = a + b mean, fitted to
the residuals of the view (in the manner of EMVA 1288), and each picture's deviation follows from it.
"""

from dataclasses import dataclass

import numpy as np

Array = np.ndarray

LEAST_SPREAD = 0.02  # least variance of f over the frames for a row to be resolved


@dataclass(frozen=True)
class FrameDemodulation:
    """`bright_dn`, `dark_dn` and their deviations (H, W); `noise_dn` (H, W): of one frame; `kept` (N,): frames used."""

    bright_dn: Array
    dark_dn: Array
    bright_sigma_dn: Array
    dark_sigma_dn: Array
    noise_dn: Array
    kept: Array

    @property
    def swing_dn(self) -> Array:
        """Light of the blinking alone (H, W): positive in set A, negative in a counterphase set B."""
        return self.bright_dn - self.dark_dn


def row_lines(light: Array, share: Array) -> tuple[Array, Array, Array, Array]:
    """Fit D + f K: D, K (H, W), the rows' inverse normal matrices (H, 2, 2), and residuals (N, H, W).

    `light` (N, H, W), `share` (N, H).
    """
    f = np.where(np.isfinite(share), share, 0.0)
    mean = f.mean(axis=0)
    spread = np.mean((f - mean) ** 2, axis=0)
    resolved = spread > LEAST_SPREAD
    safe = np.where(resolved, spread, 1.0)
    centre = light.mean(axis=0)
    swing = np.einsum("nh,nhw->hw", f - mean, light - centre) / (safe * len(f))[:, None]
    swing = np.where(resolved[:, None], swing, np.nan)
    dark = centre - mean[:, None] * swing
    residual = light - dark - f[:, :, None] * swing
    n = len(f)
    inverse = np.empty((len(mean), 2, 2))
    inverse[:, 1, 1] = 1.0 / (safe * n)
    inverse[:, 0, 1] = inverse[:, 1, 0] = -mean / (safe * n)
    inverse[:, 0, 0] = 1.0 / n + mean**2 / (safe * n)
    return dark, swing, inverse, residual


def photon_transfer(mean: Array, variance: Array) -> tuple[float, float]:
    """Line variance = a + b mean through medians over bins of the mean; both at least zero, a above quantisation."""
    usable = np.isfinite(mean) & np.isfinite(variance)
    if np.count_nonzero(usable) < 100:
        return 1.0, 0.0
    mean, variance = mean[usable], variance[usable]
    edges = np.quantile(mean, np.linspace(0.02, 0.98, 13))
    which = np.digitize(mean, edges)
    centres = [(mean[which == k].mean(), variance[which == k].mean()) for k in range(1, 13) if np.any(which == k)]
    x, y = np.array(centres).T
    slope, floor = np.polyfit(x, y, 1) if len(x) > 2 and np.ptp(x) > 1e-6 else (0.0, float(y.mean()))
    if slope < 0 or floor < 0:
        slope, floor = (0.0, float(y.mean())) if slope < 0 else (float(np.sum(x * y) / np.sum(x * x)), 0.0)
    return max(float(floor), 1e-6), float(slope)


def steady_frames(residual: Array) -> Array:
    """Mask (N,) of frames whose residual (N, H, W) is not far above the others': a frame that overlaps a transit is."""
    size = np.sqrt(np.nanmean(residual.astype(np.float64) ** 2, axis=(1, 2)))
    return size <= 2.0 * np.median(size) + 1e-9


def demodulate_frames(light: Array, share: Array) -> FrameDemodulation:
    """Demodulate a view's linear light (N, H, W), NaN where saturated, with the shares f (N, H)."""
    kept = np.ones(len(light), bool)
    for _ in range(3):
        dark, swing, inverse, residual = row_lines(light[kept], share[kept])
        steady = steady_frames(residual)
        if np.all(steady) or np.count_nonzero(steady) < 4:
            break
        kept[np.flatnonzero(kept)[~steady]] = False
    freedom = max(np.count_nonzero(kept) - 2, 1)
    variance = np.sum(residual.astype(np.float64) ** 2, axis=0) / freedom
    centre = dark + share[kept].mean(axis=0)[:, None] * swing
    floor, slope = photon_transfer(centre, variance)
    noise = np.sqrt(floor + slope * np.maximum(np.nan_to_num(centre), 0.0))
    bright_factor = np.sqrt(inverse[:, 0, 0] + 2 * inverse[:, 0, 1] + inverse[:, 1, 1])
    pictures = (dark + swing, dark, noise * bright_factor[:, None], noise * np.sqrt(inverse[:, 0, 0])[:, None], noise)
    return FrameDemodulation(*(picture.astype(np.float32) for picture in pictures), kept)
