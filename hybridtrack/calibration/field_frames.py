"""What the frames of ordinary motion predict at event pixels: log light, its slopes, and how fast it changes.

Frames are read through the module's map at the event pixels' own places. Image velocity comes from dense flow to the
frames before and after (Kroeger et al. 2016, as OpenCV has it), so that the rate of change is -slope . velocity, even
where the picture moves by many pixels from frame to frame.
"""

from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.calibration.frame_light import view_light
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording

Array = np.ndarray

HALF_STEP = 0.5  # frame px to each side for slopes
FLOOR_DN = 0.5


@dataclass(frozen=True, eq=False)
class FieldFrame:
    """One frame at the event pixels (rows, columns): `log_light`, `light_dn`, `slope` (rows, columns, 2) a colour
    px, and `rate` a ns; NaN where the frame does not show them or is saturated."""

    log_light: Array
    light_dn: Array
    slope: Array
    rate: Array


def grey_of(light: Array) -> Array:
    """A picture (H, W) uint8 for flow, in equal steps of the square root of light, whose noise is alike everywhere."""
    known = np.nan_to_num(light, nan=float(np.nanmax(light)) if np.isfinite(light).any() else 0.0)
    root = np.sqrt(np.maximum(known, 0.0))
    return np.clip(root * (255.0 / max(float(np.percentile(root, 99.8)), 1.0)), 0, 255).astype(np.uint8)


class FieldFrames:
    """Reads the frames of a recording as predictions at event pixels."""

    def __init__(self, recording: Recording, module: HybridModule, shift_px: Array) -> None:
        """`shift_px` (2,): added to the places that the module's map gives."""
        self.recording, self.module = recording, module
        mode = module.frame_mode
        self.place = mode.frame_from_colour(module.event_pixel_positions() + shift_px).astype(np.float32)
        self._flow = cv2.DISOpticalFlow.create(cv2.DISOPTICAL_FLOW_PRESET_FAST)
        self._light: dict[int, Array] = {}
        self._grey: dict[int, Array] = {}

    def light(self, index: int) -> Array:
        """Linear light of a frame, the last few kept."""
        if index not in self._light:
            for old in [k for k in self._light if abs(k - index) > 2]:
                del self._light[old], self._grey[old]
            self._light[index] = view_light(self.recording, np.array([index]), self.module)[0]
            self._grey[index] = grey_of(self._light[index])
        return self._light[index]

    def velocity(self, index: int) -> Array:
        """Image velocity (H, W, 2) in colour px a ns, from the frames before and after."""
        stamps, here = self.recording.frames.t_start_ns, self.grey(index)
        total, span = np.zeros((*here.shape, 2), np.float32), 0.0
        for other in (index - 1, index + 1):
            if 0 <= other < len(stamps):
                flow = self._flow.calc(here, self.grey(other), np.zeros_like(total))
                sign = float(np.sign(other - index))
                total += np.float32(sign) * flow
                span += sign * float(stamps[other] - stamps[index])
        return total * (self.module.frame_mode.binning / span)

    def grey(self, index: int) -> Array:
        """A frame as flow sees it."""
        self.light(index)
        return self._grey[index]

    def sampled(self, picture: Array, offset: tuple[float, float] = (0.0, 0.0)) -> Array:
        """A picture (H, W) or (H, W, C) at the event pixels, NaN outside."""
        x, y = self.place[..., 0] + np.float32(offset[0]), self.place[..., 1] + np.float32(offset[1])
        return cv2.remap(
            picture.astype(np.float32), x, y, cv2.INTER_CUBIC, borderMode=cv2.BORDER_CONSTANT, borderValue=float("nan")
        )

    def frame(self, index: int) -> FieldFrame:
        """Prediction of one frame."""
        light = self.light(index)
        binning = self.module.frame_mode.binning

        def log_at(offset: tuple[float, float]) -> Array:
            values = self.sampled(light, offset)
            return np.log(np.where(values > FLOOR_DN, values, np.nan))

        with np.errstate(invalid="ignore"):
            across = (log_at((HALF_STEP, 0.0)) - log_at((-HALF_STEP, 0.0))) / (2 * HALF_STEP * binning)
            down = (log_at((0.0, HALF_STEP)) - log_at((0.0, -HALF_STEP))) / (2 * HALF_STEP * binning)
            middle = log_at((0.0, 0.0))
        slope = np.stack([across, down], axis=-1)
        velocity = self.sampled(self.velocity(index))
        return FieldFrame(middle, np.exp(middle), slope, -np.sum(slope * velocity, axis=-1))
