"""Bright and dark picture of a view, from frames that saw the board blink.

With the shares f[n, r] known, every pixel of row r is a line D + f K over the frames. Least squares gives dark_dn = D
and bright_dn = D + K. The noise of a single frame follows the photon-transfer line, variance = a + b mean, fitted to
the residuals of the view (in the manner of EMVA 1288), and each picture's deviation follows from it.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.demodulation_kernels import fit_row_lines, fit_swept_lines

Array = np.ndarray

LEAST_SPREAD = 0.0015  # least variance of f over the frames for a row to be resolved


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

    def swapped(self) -> "FrameDemodulation":
        """The same with the names of the two states exchanged."""
        return FrameDemodulation(
            self.dark_dn, self.bright_dn, self.dark_sigma_dn, self.bright_sigma_dn, self.noise_dn, self.kept
        )


@dataclass(frozen=True)
class SweptShares:
    """Shares f that differ from pixel to pixel: `table` (N, H, Q), read at `level` (H, W), 0 to Q - 1."""

    table: Array
    level: Array

    def of(self, frames: Array) -> "SweptShares":
        """Those of the selected frames."""
        return SweptShares(self.table[frames], self.level)


@dataclass(frozen=True)
class RowShares:
    """Shares f (N, H) that all pixels of a row have in common."""

    share: Array

    def of(self, frames: Array) -> "RowShares":
        """Those of the selected frames."""
        return RowShares(self.share[frames])


Shares = RowShares | SweptShares


@dataclass(frozen=True)
class PixelLines:
    """`dark` D and `swing` K (H, W), `variance` of a sample about its line (H, W), `frame_rms` (N,) of the residuals
    of each frame, `mean_share` and the lines' inverse normal matrices `inverse` (.., 2, 2) for (D, K), both a row
    (H, 1) or a pixel (H, W)."""

    dark: Array
    swing: Array
    variance: Array
    frame_rms: Array
    mean_share: Array
    inverse: Array


def pixel_lines(light: Array, shares: Shares) -> PixelLines:
    """Fit D + f K to `light` (N, H, W); NaN where shares are too alike."""
    count, height, width = light.shape
    light = np.ascontiguousarray(light)
    dark, swing, square = (np.empty((height, width)) for _ in range(3))
    frame_square = np.empty((height, count))
    if isinstance(shares, RowShares):
        share = np.ascontiguousarray(shares.share, dtype=float)
        fit_row_lines(light, share, LEAST_SPREAD, dark, swing, square, frame_square)
        mean, spread = share.mean(axis=0)[:, None], share.var(axis=0)[:, None]
    else:
        mean, spread = np.empty((height, width)), np.empty((height, width))
        table = np.ascontiguousarray(shares.table, dtype=float)
        fit_swept_lines(light, table, shares.level, LEAST_SPREAD, dark, swing, square, mean, spread, frame_square)
    spread = np.maximum(spread, 1e-12)
    inverse = np.empty((*mean.shape, 2, 2))
    inverse[..., 1, 1] = 1.0 / (spread * count)
    inverse[..., 0, 1] = inverse[..., 1, 0] = -mean / (spread * count)
    inverse[..., 0, 0] = 1.0 / count + mean**2 / (spread * count)
    known = np.isfinite(frame_square).any(axis=1)
    frame_rms = np.sqrt(np.nanmean(frame_square[known], axis=0)) if np.any(known) else np.full(count, np.nan)
    return PixelLines(dark, swing, square / max(count - 2, 1), frame_rms, mean, inverse)


def photon_transfer(mean: Array, variance: Array) -> tuple[float, float]:
    """Line variance = a + b mean through medians over bins of the mean; both at least zero, a above quantisation."""
    mean, variance = mean[::2, ::2].ravel(), variance[::2, ::2].ravel()
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


def steady_frames(frame_rms: Array) -> Array:
    """Mask (N,) of frames whose residual is not far above the others': a frame that overlaps a transit is."""
    return frame_rms <= 2.0 * np.median(frame_rms) + 1e-9


def demodulate_frames(light: Array, shares: Shares) -> FrameDemodulation:
    """Demodulate a view's linear light (N, H, W), NaN where saturated, with the shares of its N frames."""
    kept = np.ones(len(light), bool)
    lines = pixel_lines(light, shares)
    for _ in range(2):
        steady = steady_frames(lines.frame_rms)
        if np.all(steady) or np.count_nonzero(steady) < 4:
            break
        kept[np.flatnonzero(kept)[~steady]] = False
        lines = pixel_lines(light[kept], shares.of(kept))
    centre = lines.dark + lines.mean_share * lines.swing
    floor, slope = photon_transfer(centre, lines.variance)
    noise = np.sqrt(floor + slope * np.maximum(np.nan_to_num(centre), 0.0))
    inverse = lines.inverse
    bright_factor = np.sqrt(inverse[..., 0, 0] + 2 * inverse[..., 0, 1] + inverse[..., 1, 1])
    dark_factor = np.sqrt(inverse[..., 0, 0])
    pictures = (lines.dark + lines.swing, lines.dark, noise * bright_factor, noise * dark_factor, noise)
    bright, dark, bright_sigma, dark_sigma, noise = (picture.astype(np.float32) for picture in pictures)
    return FrameDemodulation(bright, dark, bright_sigma, dark_sigma, noise, kept)
