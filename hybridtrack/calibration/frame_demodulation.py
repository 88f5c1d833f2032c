"""Bright and dark picture of a view, from frames that saw the board blink.

With the shares f[n, r] known, every pixel of row r is a line D + f K over the frames. Least squares gives dark_dn = D
and bright_dn = D + K. The noise of a single frame follows the photon-transfer line, variance = a + b mean, fitted to
the residuals of the view (in the manner of EMVA 1288), and each picture's deviation follows from it.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.demodulation_kernels import fit_row_lines

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

    def swapped(self) -> "FrameDemodulation":
        """The same with the names of the two states exchanged."""
        return FrameDemodulation(
            self.dark_dn, self.bright_dn, self.dark_sigma_dn, self.bright_sigma_dn, self.noise_dn, self.kept
        )


@dataclass(frozen=True)
class RowLines:
    """`dark` D and `swing` K (H, W), `variance` of a sample about its line (H, W), `frame_rms` (N,) of the residuals
    of each frame, and the rows' inverse normal matrices `inverse` (H, 2, 2) for (D, K)."""

    dark: Array
    swing: Array
    variance: Array
    frame_rms: Array
    inverse: Array


def row_lines(light: Array, share: Array) -> RowLines:
    """Fit D + f K to `light` (N, H, W) with `share` f (N, H); NaN where a row's shares are too alike."""
    count, height, width = light.shape
    dark, swing, square = (np.empty((height, width)) for _ in range(3))
    frame_square = np.empty((height, count))
    share = np.ascontiguousarray(share, dtype=float)
    fit_row_lines(np.ascontiguousarray(light), share, LEAST_SPREAD, dark, swing, square, frame_square)
    mean, spread = share.mean(axis=0), np.maximum(share.var(axis=0), 1e-12)
    inverse = np.empty((height, 2, 2))
    inverse[:, 1, 1] = 1.0 / (spread * count)
    inverse[:, 0, 1] = inverse[:, 1, 0] = -mean / (spread * count)
    inverse[:, 0, 0] = 1.0 / count + mean**2 / (spread * count)
    known = np.isfinite(frame_square).any(axis=1)
    frame_rms = np.sqrt(np.nanmean(frame_square[known], axis=0)) if np.any(known) else np.full(count, np.nan)
    return RowLines(dark, swing, square / max(count - 2, 1), frame_rms, inverse)


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


def demodulate_frames(light: Array, share: Array) -> FrameDemodulation:
    """Demodulate a view's linear light (N, H, W), NaN where saturated, with the shares f (N, H)."""
    kept = np.ones(len(light), bool)
    lines = row_lines(light, share)
    for _ in range(2):
        steady = steady_frames(lines.frame_rms)
        if np.all(steady) or np.count_nonzero(steady) < 4:
            break
        kept[np.flatnonzero(kept)[~steady]] = False
        lines = row_lines(light[kept], share[kept])
    centre = lines.dark + share[kept].mean(axis=0)[:, None] * lines.swing
    floor, slope = photon_transfer(centre, lines.variance)
    noise = np.sqrt(floor + slope * np.maximum(np.nan_to_num(centre), 0.0))
    inverse = lines.inverse
    bright_factor = np.sqrt(inverse[:, 0, 0] + 2 * inverse[:, 0, 1] + inverse[:, 1, 1])
    dark_factor = np.sqrt(inverse[:, 0, 0])
    pictures = (
        lines.dark + lines.swing,
        lines.dark,
        noise * bright_factor[:, None],
        noise * dark_factor[:, None],
        noise,
    )
    bright, dark, bright_sigma, dark_sigma, noise = (picture.astype(np.float32) for picture in pictures)
    return FrameDemodulation(bright, dark, bright_sigma, dark_sigma, noise, kept)
