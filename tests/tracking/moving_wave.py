"""A wave of log light that runs over an ideal module at constant speed: its recording, and its closed form.

Log light is `LEVEL + amplitude * sin(2 pi (u - speed t) / WAVE_PX)`, the same in every row; frames average it over bins
and exposures without noise, event pixels are ideal comparators at a point each.
"""

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from planar_scene import compare, small_module

from hybridtrack.module import Contrast, HybridModule
from hybridtrack.recording import Events, RecordingWriter
from hybridtrack.tracking.light_levels import frame_clock

Array = np.ndarray
LEVEL, WAVE_PX = -1.2, 48.0
THETA = 0.03
PERIOD_NS, FIRST_NS = 16_000_000, 3_000_000


def wave_module(
    pitch: int = 4, binning: int = 2, mirror_x: bool = False, line_time_ns: float = 15_000.0
) -> HybridModule:
    """A module whose frames have 16 bits, and small thresholds."""
    module = small_module(pitch, binning, mirror_x, contrast=Contrast(on_threshold=THETA, off_threshold=THETA))
    assert module.timing is not None
    return module.model_copy(
        update={
            "frame_mode": module.frame_mode.model_copy(update={"white_dn": 65535.0}),
            "timing": module.timing.model_copy(update={"line_time_ns": line_time_ns}),
        }
    )


@dataclass
class Wave:
    """`gain` (rows, columns) multiplies the true thresholds; `lag_ns` is an event's lateness at the light of white."""

    module: HybridModule = field(default_factory=wave_module)
    speed_px_s: float = 1500.0
    amplitude: float = 0.5
    level: float = LEVEL
    frames: int = 3
    exposure_ns: int = 6_000_000
    gain: Array | float = 1.0
    lag_ns: float = 0.0

    def log_light(self, u: Array, t_s: Array | float) -> Array:
        """The wave itself."""
        return self.level + self.amplitude * np.sin(2 * np.pi * (u - self.speed_px_s * t_s) / WAVE_PX)

    def truth(self, t_ns: int) -> Array:
        """What a perfect frame would be at an instant, log light (H, W)."""
        mode = self.module.frame_mode
        u = np.arange(mode.width * mode.binning)
        light = np.exp(self.log_light(u, t_ns * 1e-9)).reshape(mode.width, mode.binning).mean(axis=1)
        return np.tile(np.log(light), (mode.height, 1))

    def starts_ns(self) -> Array:
        """Stamps of the frames."""
        return FIRST_NS + PERIOD_NS * np.arange(self.frames)

    def frame(self, start_ns: int) -> Array:
        """One frame: the mean of light over bins and over each row's exposure."""
        mode, timing = self.module.frame_mode, self.module.timing
        assert timing is not None
        u = np.arange(mode.width * mode.binning)
        starts = timing.exposure_start_ns(start_ns, mode.read_order(np.arange(mode.height)))
        light = np.zeros((mode.height, mode.width))
        parts = 40
        for k in range(parts):
            t_s = (starts[:, None] + (k + 0.5) / parts * self.exposure_ns) * 1e-9
            light += np.exp(self.log_light(u, t_s)).reshape(mode.height, mode.width, mode.binning).mean(axis=2) / parts
        return np.rint(np.minimum(light, 1.0) * mode.white_dn).astype(np.uint16)

    def events(self, step_ns: int = 50_000) -> Events:
        """All events up to 8 ms after the last exposure; before the first, comparators sit at their levels."""
        end = frame_clock(self.module, int(self.starts_ns()[-1]), self.exposure_ns).span_ns[1] + 8_000_000
        u = self.module.event_pixel_positions()[..., 0]
        on = THETA * self.gain * np.ones(u.shape)
        before = self.log_light(u, 0.0)
        memory, parts, room = before.copy(), [], np.zeros((u.size * 8, 4), np.int64)
        for t in range(0, end, step_ns):
            after = self.log_light(u, (t + step_ns) * 1e-9)
            count = compare(before, after, memory, on, on, t, step_ns, room)
            parts.append(room[:count].copy())
            before = after
        every = np.concatenate(parts)
        lag = self.lag_ns * np.exp(-self.log_light(u[every[:, 2], every[:, 1]], every[:, 0] * 1e-9))
        t = every[:, 0] + np.rint(lag).astype(np.int64)
        order = np.argsort(t, kind="stable")
        x, y, sign = (every[order, k].astype(kind) for k, kind in ((1, np.uint16), (2, np.uint16), (3, np.uint8)))
        return Events(t[order], x, y, sign)

    def write(self, path: Path, events: Events | None = None, lost: list[tuple[int, int]] | None = None) -> Path:
        """Write the recording; `events` None: the wave's own."""
        kept = self.events() if events is None else events
        with RecordingWriter(path, self.module) as writer:
            writer.append_events(kept.t, kept.x, kept.y, kept.on)
            starts = self.starts_ns()
            writer.append_frames(
                np.stack([self.frame(int(t)) for t in starts]), starts, np.full(len(starts), self.exposure_ns)
            )
            if lost:
                t0, t1 = np.array(lost, np.int64).T
                writer.set_group("events_lost", t0=t0, t1=t1)
        return path
