"""Frames as 8-bit grey pictures for descriptors, whatever the module delivers: grey, mosaic or RGB, 8 or 16 bit."""

import cv2
import numpy as np

from hybridtrack.module import FrameMode

Array = np.ndarray

BRIGHT_SHARE = 99.5  # percentile that becomes white


def grey_picture(image: Array, mode: FrameMode) -> Array:
    """uint8 (H, W) from a stored picture (H, W) or (H, W, 3), stretched to its own bright end, in a square-root scale.

    A mosaic is smoothed by a binomial 3 x 3 kernel, under which every pixel holds half green and a quarter of red and
    blue each, and keeps its place.
    """
    light: Array = np.asarray(image, dtype=np.float32)
    if light.ndim == 3:
        light = light.mean(axis=2)
    elif mode.mosaic != "none":
        light = cv2.sepFilter2D(light, -1, np.array([0.25, 0.5, 0.25]), np.array([0.25, 0.5, 0.25]))
    light = np.maximum(light - mode.black_dn, 0.0)
    top = max(float(np.percentile(light, BRIGHT_SHARE)), 1e-6)
    share = np.minimum(light / top, 1.0)
    if mode.response == "linear":
        share = np.sqrt(share)
    return np.round(255.0 * share).astype(np.uint8)


def point_colours(image: Array, mode: FrameMode, uv: Array) -> Array:
    """RGB (N, 3) in 0..1 of the picture at colour-array positions (N, 2); grey where the picture is grey or a
    mosaic."""
    position = np.round(mode.frame_from_colour(uv)).astype(int)
    x, y = np.clip(position[:, 0], 0, mode.width - 1), np.clip(position[:, 1], 0, mode.height - 1)
    if np.ndim(image) == 3:
        picture = np.asarray(image, dtype=np.float32)[y, x]
        return np.clip((picture - mode.black_dn) / (mode.white_dn - mode.black_dn), 0.0, 1.0)
    grey = grey_picture(image, mode)[y, x] / 255.0
    return np.repeat(grey[:, None], 3, axis=1)
