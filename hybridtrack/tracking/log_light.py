"""From frame numbers to the natural logarithm of linear light, with a map of what is not to be trusted."""

from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.errors import ModuleMismatchError
from hybridtrack.module import HybridModule, clear_in_bin

Array = np.ndarray

GAMMA = 2.2  # exponent of response "gamma" (common practice, no source)
FLOOR_SHARE = 0.004  # light below this share of white is noise, about one step of 8 bits
SATURATED_SHARE = 0.985


@dataclass(frozen=True)
class LogLight:
    """`log_light` float32 (H, W), natural log of light as a share of white; `trust` float32 (H, W) in 0..1,
    zero where saturated and falling towards black; both on the regular grid of frame pixels."""

    log_light: Array
    trust: Array


class LogLightReader:
    """Turns the pictures of one module into log light, by its levels, response, mosaic and clear sites."""

    def __init__(self, module: HybridModule) -> None:
        self._mode = module.frame_mode
        self._displacement = self._centre_displacement(module)

    @staticmethod
    def _centre_displacement(module: HybridModule) -> Array | None:
        """How far each frame pixel's light lies from the bin's centre, in frame px (H, W, 2); None where nowhere."""
        mode = module.frame_mode
        if mode.clear_in_frame != "omitted" or not clear_in_bin(mode, module.cluster)[0].any():
            return None
        columns, rows = np.meshgrid(np.arange(mode.width), np.arange(mode.height))
        regular = mode.colour_from_frame(np.stack([columns, rows], axis=-1))
        return ((module.frame_pixel_centres() - regular) / mode.binning).astype(np.float32)

    def _check(self, image: Array) -> None:
        if image.shape[:2] != self._mode.shape or image.ndim not in (2, 3):
            raise ModuleMismatchError(
                f"Expected pictures of {self._mode.width}x{self._mode.height} px as the module's frame mode says, "
                f"got an array of shape {image.shape}."
            )

    def light(self, image: Array) -> Array:
        """Linear light as a share of white, float32 (H, W), from (H, W) or (H, W, 3) uint8 or uint16."""
        self._check(image)
        mode = self._mode
        light = (image.astype(np.float32) - mode.black_dn) / (mode.white_dn - mode.black_dn)
        if mode.response == "gamma":
            light = np.maximum(light, 0.0) ** GAMMA
        if light.ndim == 3:
            light = light @ np.array([0.25, 0.5, 0.25], np.float32)
        elif mode.mosaic != "none":
            # Each output is one quarter red, one half green, one quarter blue at any phase of a 2x2 mosaic.
            light = np.asarray(
                cv2.sepFilter2D(light, -1, np.array([0.25, 0.5, 0.25]), np.array([0.25, 0.5, 0.25])), np.float32
            )
        return light

    def read(self, image: Array) -> LogLight:
        """Log light and trust of one picture. Raises ModuleMismatchError where its size is not the module's."""
        light = self.light(image)
        full = image if image.ndim == 2 else image.max(axis=2)
        mode = self._mode
        limit = mode.black_dn + SATURATED_SHARE * (mode.white_dn - mode.black_dn)
        saturated = (full >= limit).astype(np.uint8)
        if mode.mosaic != "none":
            saturated = cv2.dilate(saturated, np.ones((3, 3), np.uint8))
        log_light = np.log(np.maximum(light, FLOOR_SHARE))
        if self._displacement is not None:
            log_light = _on_regular_grid(log_light, self._displacement)
        trust = light / (light + 5.0 * FLOOR_SHARE)
        trust = np.where(saturated > 0, 0.0, np.maximum(trust, 0.0)).astype(np.float32)
        return LogLight(log_light.astype(np.float32), trust)


def _on_regular_grid(values: Array, displacement: Array) -> Array:
    """Move samples taken `displacement` (H, W, 2) px off their grid points onto these, to first order.

    The slope comes from the samples at hand; a second pass takes it from the first one's result, which is closer.
    """
    moved = values
    for _ in range(2):
        slope_v, slope_u = np.gradient(moved)
        moved = values - slope_u * displacement[..., 0] - slope_v * displacement[..., 1]
    return moved
