"""Sharp pictures and pixel levels from a frame and the events around it.

A blurred picture is the mean of light over the exposure, and events say how log light moved within it. With level E(t)
from the events of a pixel, log light at an instant t* of the exposure [t0, t1] is

    log L(t*) = log B - (log(1/(t1 - t0) * integral of exp E(t) dt) - E(t*))                (Pan et al. 2019)

The bracket is known at event pixels; between them, for frame pixels, it is interpolated. Each row has its own exposure.
"""

from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.errors import DegenerateDataError, NotCalibratedError
from hybridtrack.module import HybridModule
from hybridtrack.recording import Events
from hybridtrack.tracking.feature_table import NEVER, PIXEL
from hybridtrack.tracking.level_kernels import integrate_exposures
from hybridtrack.tracking.log_light import LogLight

Array = np.ndarray


@dataclass(frozen=True)
class FrameClock:
    """When the rows of one frame were exposed, on the event clock."""

    first_start_ns: float
    line_time_ns: float
    exposure_ns: int
    height: int
    row_order: int

    def rows_before(self, row: Array) -> Array:
        """Rows read before `row` (any shape, fractions allowed)."""
        return np.asarray(row, float) if self.row_order == 1 else self.height - 1 - np.asarray(row, float)

    def start_ns(self, row: Array) -> Array:
        """Start of exposure of `row`, int64 ns."""
        return np.rint(self.first_start_ns + self.line_time_ns * self.rows_before(row)).astype(np.int64)

    def middle_ns(self, row: Array) -> Array:
        """Middle of exposure of `row`, int64 ns."""
        return self.start_ns(row) + self.exposure_ns // 2

    @property
    def span_ns(self) -> tuple[int, int]:
        """First start and last end of exposure over all rows."""
        return int(self.first_start_ns), int(
            self.first_start_ns + self.line_time_ns * (self.height - 1)
        ) + self.exposure_ns


def frame_clock(module: HybridModule, t_start_ns: int, exposure_ns: int) -> FrameClock:
    """The rows' exposures of a frame stamped `t_start_ns` (frame clock). Raises NotCalibratedError without clocks."""
    timing, mode = module.known_timing(), module.frame_mode
    exposure = round(float(timing.true_exposure_ns(np.array(exposure_ns))))
    if exposure <= 0:
        raise DegenerateDataError(f"a frame's exposure must be positive, got {exposure} ns")
    line = float(timing.line_time_ns or 0.0) if mode.shutter == "rolling" else 0.0
    return FrameClock(
        float(timing.exposure_start_ns(np.array(t_start_ns), np.array(0))), line, exposure, mode.height, mode.row_order
    )


def check_for_events(module: HybridModule) -> None:
    """Raise NotCalibratedError where the module lacks what events need: the map to the colour array and thresholds."""
    if module.colour_from_event is None:
        raise NotCalibratedError(
            f"module '{module.name}': tracking with events requires a calibrated map, and 'colour_from_event' is null"
        )
    contrast = module.contrast
    if contrast is None or contrast.on_threshold is None or contrast.off_threshold is None:
        raise NotCalibratedError(
            f"module '{module.name}': tracking with events requires both contrast thresholds, and 'contrast' lacks them"
        )


def new_levels(module: HybridModule) -> np.recarray:
    """Pixel records (rows, columns) of a calibrated module, before the first frame."""
    check_for_events(module)
    assert module.contrast is not None
    shape = module.event_grid.shape
    usable = np.ones(shape, np.uint8)
    defects = module.defects
    for x, y in [] if defects is None else [*defects.hot, *defects.dead]:
        if 0 <= x < shape[1] and 0 <= y < shape[0]:
            usable[y, x] = 0
    frame_uv = module.frame_mode.frame_from_colour(module.event_pixel_positions())
    height, width = module.frame_mode.shape
    usable[(frame_uv[..., 0] < 0) | (frame_uv[..., 0] > width - 1)] = 0
    usable[(frame_uv[..., 1] < 0) | (frame_uv[..., 1] > height - 1)] = 0
    levels = np.zeros(shape, PIXEL).view(np.recarray)
    levels.anchor_ns[:] = levels.last_ns[:] = levels.reference_ns[:] = NEVER
    levels.fresh[:] = 1
    levels.theta_on[:], levels.theta_off[:] = module.contrast.on_threshold, module.contrast.off_threshold
    levels.usable[:] = usable
    levels.u[:], levels.v[:] = frame_uv[..., 0], frame_uv[..., 1]
    return levels


class SharpPictures:
    """Makes sharp pictures of one module and sets its levels by them."""

    def __init__(self, module: HybridModule, levels: np.recarray) -> None:
        self._levels = levels
        self._always_usable = levels.usable.copy()
        mode = module.frame_mode
        columns, rows = np.meshgrid(np.arange(mode.width), np.arange(mode.height))
        event_xy = module.event_from_colour_px(mode.colour_from_frame(np.stack([columns, rows], axis=-1)))
        self._event_xy = np.ascontiguousarray(event_xy.astype(np.float32))
        self.frame_uv = np.stack([levels.u, levels.v], axis=-1)
        self._theta_on, self._theta_off = (np.ascontiguousarray(theta) for theta in (levels.theta_on, levels.theta_off))

    def correction(
        self, events: Events, clock: FrameClock, instant_ns: Array | None, ramp_ns: int, lag_ns: int
    ) -> tuple[Array, Array]:
        """The double integral's bracket (rows, columns) at the rows' middles, or at `instant_ns` (rows, columns); and
        each pixel's last event before that."""
        start = clock.start_ns(self.frame_uv[..., 1])
        instant = start + clock.exposure_ns // 2 if instant_ns is None else instant_ns
        bracket, count, last = integrate_exposures(
            events.t,
            events.x,
            events.y,
            events.on,
            self._theta_on,
            self._theta_off,
            lag_ns,
            start,
            clock.exposure_ns,
            instant,
            ramp_ns,
        )
        if instant_ns is None:
            # One event in an exposure is as likely noise as movement, and moves the mean less than its own error.
            bracket = np.where(count > 1, bracket, np.float32(0.0))
        return bracket, last

    def instants(self, clock: FrameClock, share: float) -> Array:
        """When `share` of its row's exposure has passed, for each event pixel, int64 ns."""
        return clock.start_ns(self.frame_uv[..., 1]) + np.int64(share * clock.exposure_ns)

    def at_frame_pixels(self, light: LogLight, bracket: Array) -> Array:
        """Sharp log light (H, W) on the frame's grid."""
        spread = cv2.remap(
            bracket, self._event_xy[..., 0], self._event_xy[..., 1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE
        )
        return light.log_light - spread

    def set_levels(self, light: LogLight, clock: FrameClock, bracket: Array, last_ns: Array, lag_ns: int) -> None:
        """Set every pixel's level to the sharp picture at its row's middle of exposure, events being `lag_ns` late."""
        levels, (u, v) = self._levels, np.moveaxis(self.frame_uv.astype(np.float32), -1, 0)
        blurred = cv2.remap(light.log_light, u, v, cv2.INTER_CUBIC, borderMode=cv2.BORDER_REPLICATE)
        trust = cv2.remap(light.trust, u, v, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
        levels.level[:] = blurred - bracket
        levels.usable[:] = self._always_usable & (trust > 0.05)
        middle = clock.middle_ns(self.frame_uv[..., 1])
        levels.anchor_ns[:] = middle
        levels.reference_ns[:] = middle
        levels.last_ns[:] = last_ns + lag_ns
        levels.fresh[:] = 1
