"""The event pixels as pictures need them: thresholds, defects, places in the frame, and lateness by light."""

from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.errors import DegenerateDataError, ModuleMismatchError, NotCalibratedError
from hybridtrack.module import ContrastMap, HybridModule

Array = np.ndarray

CONSTANT_LATENCY_NS = 25_000.0  # what light does not change of the latency, as calibration assumes
LONGEST_LAG_NS = 5e6


@dataclass(frozen=True, eq=False)
class EventGrid:
    """What the event pixels are: thresholds (rows, columns), `usable` pixels, their `frame_uv` (rows, columns, 2), and
    the event position `event_xy` float32 (H, W, 2) of every frame pixel."""

    theta_on: Array
    theta_off: Array
    usable: Array
    frame_uv: Array
    event_xy: Array

    def _spread(self, values: Array, kind: int) -> Array:
        u, v = self.event_xy[..., 0], self.event_xy[..., 1]
        return cv2.remap(self._filled(values.astype(np.float32)), u, v, kind, borderMode=cv2.BORDER_REPLICATE)

    def at_frame_pixels(self, values: Array) -> Array:
        """Values (rows, columns) of the event pixels interpolated to the frame's grid (H, W), defects filled.

        Cubic: a sixth less error of moving pictures than linear.
        """
        return self._spread(values, cv2.INTER_CUBIC)

    def at_event_pixels(self, picture: Array) -> Array:
        """Values of a picture (H, W) at the event pixels (rows, columns)."""
        u, v = np.moveaxis(self.frame_uv.astype(np.float32), -1, 0)
        return cv2.remap(picture, u, v, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)

    def between(self, values: Array) -> Array:
        """As `at_frame_pixels`, linear, so that nothing lies outside of its neighbours."""
        return self._spread(values, cv2.INTER_LINEAR)

    def _filled(self, values: Array) -> Array:
        """Unusable pixels take the mean of their usable neighbours, ring by ring."""
        known = self.usable.astype(np.float32)
        if known.all() or not known.any():
            return values
        values = np.where(known > 0, values, np.float32(0.0))
        while not known.all():
            weight = cv2.blur(known, (3, 3), borderType=cv2.BORDER_CONSTANT)
            total = cv2.blur(values, (3, 3), borderType=cv2.BORDER_CONSTANT)
            fill = (known == 0) & (weight > 1e-6)
            values = np.where(fill, total / np.maximum(weight, 1e-6), values)
            known[fill] = 1.0
        return values


def check_module(module: HybridModule) -> None:
    """Raise NotCalibratedError where the module lacks clocks, map or thresholds."""
    module.known_timing()
    if module.colour_from_event is None:
        raise NotCalibratedError(
            f"module '{module.name}': pictures from events require a calibrated map, and 'colour_from_event' is null"
        )
    contrast = module.contrast
    if contrast is None or contrast.on_threshold is None or contrast.off_threshold is None:
        raise NotCalibratedError(
            f"module '{module.name}': pictures from events require both contrast thresholds, and 'contrast' lacks them"
        )


def event_grid(module: HybridModule, contrast_map: ContrastMap | None) -> EventGrid:
    """The event pixels of a calibrated module; where the map of thresholds has none, the global ones serve."""
    check_module(module)
    assert module.contrast is not None
    shape, mode = module.event_grid.shape, module.frame_mode
    thresholds = []
    for name in ("on_threshold", "off_threshold"):
        single = np.full(shape, getattr(module.contrast, name))
        each = single if contrast_map is None else getattr(contrast_map, name)
        if each.shape != shape:
            raise ModuleMismatchError(f"a threshold map of shape {shape} (rows, columns) is required, got {each.shape}")
        thresholds.append(np.where(np.isfinite(each) & (each > 0), each, single))
    usable = np.ones(shape, bool)
    defects = module.defects
    for x, y in [] if defects is None else [*defects.hot, *defects.dead]:
        if 0 <= x < shape[1] and 0 <= y < shape[0]:
            usable[y, x] = False
    if not usable.any():
        raise DegenerateDataError(f"module '{module.name}': healthy event pixels are required, and all are defects")
    columns, rows = np.meshgrid(np.arange(mode.width), np.arange(mode.height))
    event_xy = module.event_from_colour_px(mode.colour_from_frame(np.stack([columns, rows], axis=-1)))
    frame_uv = mode.frame_from_colour(module.event_pixel_positions())
    return EventGrid(thresholds[0], thresholds[1], usable, frame_uv, np.ascontiguousarray(event_xy.astype(np.float32)))


@dataclass(frozen=True)
class Lateness:
    """How late events are: `constant_ns`, and `at_white_ns` at the light of white, inversely proportional to light; the
    whole at most `longest_ns`."""

    constant_ns: float
    at_white_ns: float
    longest_ns: float = LONGEST_LAG_NS

    @property
    def span_ns(self) -> tuple[int, int]:
        """Least and most of it."""
        most = self.longest_ns if self.at_white_ns > 0 else self.constant_ns
        return int(min(0.0, self.constant_ns)), int(max(0.0, most))


def lateness(module: HybridModule) -> Lateness:
    """The module's event latency; where it states at which light, the photoreceptor's part of it follows light.

    Zero where the module does not state it: it is then part of the frame offset.
    """
    timing, mode = module.known_timing(), module.frame_mode
    latency_ns, reference_dn = float(timing.event_latency_ns or 0.0), timing.reference_light_dn
    if not reference_dn or latency_ns <= CONSTANT_LATENCY_NS:
        return Lateness(latency_ns, 0.0)
    by_light_ns = (latency_ns - CONSTANT_LATENCY_NS) * reference_dn / (mode.white_dn - mode.black_dn)
    return Lateness(CONSTANT_LATENCY_NS, by_light_ns)
