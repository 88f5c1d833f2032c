"""Frames of a view as linear light above black, in grey.

A mosaic is brought to one level by a gain for each of its four phases, RGB is averaged in linear light (what a clear
pixel sees is the sum of the colours), a gamma response is undone. Saturated samples are NaN.
"""

import numpy as np

from hybridtrack.module import FrameMode
from hybridtrack.recording import Recording

Array = np.ndarray

GAMMA = 2.2


def linear_dn(image: Array, mode: FrameMode) -> Array:
    """Light above black (H, W) float32 in DN of a linear response, from a picture (H, W) or (H, W, 3); NaN if saturated."""
    dn = image.astype(np.float32)
    saturated = dn >= mode.white_dn
    light = dn - np.float32(mode.black_dn)
    if mode.response == "gamma":
        span = np.float32(mode.white_dn - mode.black_dn)
        light = span * (np.maximum(light, 0.0) / span) ** np.float32(GAMMA)
    light = np.where(saturated, np.float32(np.nan), light)
    return light.mean(axis=2) if light.ndim == 3 else light


def mosaic_gains(light: Array) -> Array:
    """Gains (2, 2) that bring the four phases of a mosaic to one level, from linear light (N, H, W)."""
    means = np.array([[np.nanmean(light[:, i::2, j::2]) for j in (0, 1)] for i in (0, 1)])
    return means.mean() / np.maximum(means, 1e-6)


def view_light(recording: Recording, frames: Array, mode: FrameMode) -> Array:
    """Linear light (N, H, W) float32 of the frames with these indices."""
    light = np.stack([linear_dn(recording.frame_image(int(k)), mode) for k in frames])
    if mode.mosaic != "none" and recording.frames.shape[2:] == ():
        gains = mosaic_gains(light).astype(np.float32)
        for i in (0, 1):
            for j in (0, 1):
                light[:, i::2, j::2] *= gains[i, j]
    return light
