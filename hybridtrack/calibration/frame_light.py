"""Frames of a view as linear light above black, in grey.

A mosaic is brought to one level by a gain for each of its phases, RGB is averaged in linear light (what a clear
pixel sees is the sum of the colours), a gamma response is undone. Saturated samples are NaN.
"""

import math

import numpy as np

from hybridtrack.module import FrameMode, HybridModule
from hybridtrack.recording import Recording

Array = np.ndarray

GAMMA = 2.2


def linear_dn(image: Array, mode: FrameMode) -> Array:
    """Light above black (H, W) float32 in DN of a linear response, from a picture (H, W) or (H, W, 3); NaN if
    saturated.
    """
    # A picture has few levels: each is turned once.
    levels = np.arange(np.iinfo(image.dtype).max + 1, dtype=np.float32)
    light = levels - np.float32(mode.black_dn)
    if mode.response == "gamma":
        span = np.float32(mode.white_dn - mode.black_dn)
        light = span * (np.maximum(light, 0.0) / span) ** np.float32(GAMMA)
    light[levels >= mode.white_dn] = np.nan
    turned = light[image]
    return turned.mean(axis=2) if turned.ndim == 3 else turned


def mosaic_period(module: HybridModule) -> tuple[int, int]:
    """Rows and columns after which filters repeat in a frame, clear sites included; (1, 1) where there is no mosaic."""
    mode, cluster = module.frame_mode, module.cluster
    if mode.mosaic == "none":
        return 1, 1
    side = max(1, math.isqrt(len(mode.mosaic)))
    if mode.binning > 1 or mode.clear_in_frame != "included":
        return side, side
    return math.lcm(side, cluster.height), math.lcm(side, cluster.width)


def mosaic_gains(light: Array, period: tuple[int, int]) -> Array:
    """Gains (period) that bring the phases of a mosaic to one level, from linear light (N, H, W)."""
    rows, columns = period
    means = np.array([[np.nanmean(light[:, i::rows, j::columns]) for j in range(columns)] for i in range(rows)])
    return means.mean() / np.maximum(means, 1e-6)


def view_light(recording: Recording, frames: Array, module: HybridModule) -> Array:
    """Linear light (N, H, W) float32 of the frames with these indices."""
    light = np.stack([linear_dn(recording.frame_image(int(k)), module.frame_mode) for k in frames])
    period = mosaic_period(module)
    if period != (1, 1) and len(recording.frames.shape) == 2:
        gains = mosaic_gains(light, period).astype(np.float32)
        repeats = (-(-light.shape[1] // period[0]), -(-light.shape[2] // period[1]))
        light *= np.tile(gains, repeats)[: light.shape[1], : light.shape[2]]
    return light
